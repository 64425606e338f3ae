"""Sweeping: a Study in, the labelled Dataset of worst values over the tolerance box out."""
