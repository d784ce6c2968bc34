"""Widgets: thin shells around the drawing functions."""
