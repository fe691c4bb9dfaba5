"""Frames read, rendered, solved, measured, compared and composed."""
