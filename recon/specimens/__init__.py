"""Specimens ready to use: an invented muscle section, and any image with a table of contents."""
