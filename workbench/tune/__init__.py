"""What to set: published tuning rules, with their limits and sources."""
