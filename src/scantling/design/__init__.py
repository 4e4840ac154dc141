"""What is to be vetted: a design file, its table, and the candidate columns they make."""
