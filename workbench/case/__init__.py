"""What we keep: the case file and its history."""
