"""Regression of the stiffness from a stress table, with errors and findings."""
