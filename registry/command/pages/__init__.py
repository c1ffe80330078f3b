"""How each answer reads as text at 80 columns: pure functions from an answer to lines."""
