"""Drawings as SVG, made on the server: plain numbers in, markup out. Each stands alone as a file."""
