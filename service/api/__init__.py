"""Machines talk here: JSON over HTTP, and a problem document for every error."""
