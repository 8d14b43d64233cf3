"""Derived numbers: averages, planes and directions, waves, stability, each with its standard error."""
