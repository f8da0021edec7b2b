"""The one road for every write: commands in, committed outcomes out."""
