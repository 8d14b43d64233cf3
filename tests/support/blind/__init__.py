"""Faults injected into returned outputs by code written without knowledge of how `collect` judges, and their verdicts."""
