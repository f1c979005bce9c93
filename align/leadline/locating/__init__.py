"""Contacts to regions, layers and probabilities."""
