"""What the loop is: exact mathematics, without randomness or files."""
