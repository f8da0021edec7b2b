"""The addresses of the pages."""
