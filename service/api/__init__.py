"""The HTTP edge: the only folder, with app.py, that knows FastAPI."""
