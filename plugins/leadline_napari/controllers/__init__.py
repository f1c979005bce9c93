"""State to snapshot to view; no screen toolkit is known here."""
