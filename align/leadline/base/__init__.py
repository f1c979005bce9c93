"""What everything else stands on: errors, checked arrays, fingerprints, progress, whole files."""
