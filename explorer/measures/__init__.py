"""Measures: what a requirement may name, declared in catalogue, computed from poles."""
