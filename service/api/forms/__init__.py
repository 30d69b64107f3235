"""The forms callers fill in: one pydantic model per body, and what becomes of it inside."""
