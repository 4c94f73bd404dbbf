"""Bytes in, bytes out, append-only; SQLAlchemy Core on SQLite, or on PostgreSQL by its address."""
