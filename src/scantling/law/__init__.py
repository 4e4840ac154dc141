"""What errors are drawn from."""
