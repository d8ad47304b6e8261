"""Fits the fusion network on simulated recordings."""
