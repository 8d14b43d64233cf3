"""Returned files: readers, completeness, frame and unit checks, and the stress table they become."""
