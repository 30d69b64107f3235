"""Pure pricing: a snapshot, an opportunity and a generator in, a price out."""
