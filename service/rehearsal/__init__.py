"""Invented markets and hindsight, run with the very code that bids in production."""
