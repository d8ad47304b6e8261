"""Compiled loops, arrays in and arrays out."""
