"""What each program's output says and where; one module a program, strict enough that a damaged block is no number."""
