"""Which strains: shapes, the fewest jobs, the linear model they lead to, expected errors and cost."""
