"""The questions a laboratory asks of its registry; one module a question."""
