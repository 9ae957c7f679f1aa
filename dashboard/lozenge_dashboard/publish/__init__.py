"""What a paper takes from a computation: figures, tables, methods, sources."""
