"""What the section's lanes are made of: graphics items that draw one snapshot each."""
