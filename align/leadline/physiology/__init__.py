"""Recordings to depth profiles."""
