"""Placeholder."""

def demo() -> None:
    """x"""
