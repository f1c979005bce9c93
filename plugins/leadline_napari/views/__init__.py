"""Widgets that draw snapshots and say what the user did; no science, no session."""
