"""Handing results over in open file formats."""
