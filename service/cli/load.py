"""Placeholder."""

def load() -> None:
    """x"""
