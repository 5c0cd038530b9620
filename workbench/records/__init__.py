"""What the plant did: reading records and finding the plant that made them."""
