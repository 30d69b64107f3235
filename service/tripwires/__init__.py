"""Rules that watch a line item by its own history and say what they saw; pure, no clock, no SQL."""
