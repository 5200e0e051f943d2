"""Fractions: what the walks predict, tabulated once with a known error."""
