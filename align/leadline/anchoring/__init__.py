"""Depth maps: by hand, and as a posterior that weighs recording against histology."""
