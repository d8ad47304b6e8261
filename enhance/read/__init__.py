"""Frames and events from files, read lazily into a recording."""
