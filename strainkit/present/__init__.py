"""Terminal tables, figures, the report and comparisons."""
