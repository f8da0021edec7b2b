"""What the rooms that answer over HTTP share."""
