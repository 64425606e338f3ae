"""Verdict: a sweep Dataset and limits in, slack, feasible region and decision out."""
