"""Slow, plain second computations that share no code with the service."""
