"""Ruled lines: found, told from strokes, and taken off."""
