"""Frozen values that flow from stage to stage; no files, no screens."""
