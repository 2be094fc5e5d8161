"""Inequalities about float64 numbers that are theorems: exact rationals and floats with all roundings bounded.

Floor: diagnose.  Knows no names of charges, no verdicts.
"""
