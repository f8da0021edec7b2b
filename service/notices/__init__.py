"""Tells receivers of decisions: takes notices from the outbox, sends them, and says how it went."""
