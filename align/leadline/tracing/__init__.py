"""Dye tracks: background, ridges, paths, centre lines, assignment to penetrations."""
