"""Rows and nothing else, on SQLite and PostgreSQL."""
