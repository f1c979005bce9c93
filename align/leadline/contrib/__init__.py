"""Scripts for other environments: nothing here is imported by Leadline, and nothing here imports it."""
