"""SQL: the only folder that imports sqlalchemy."""
