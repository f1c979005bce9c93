"""An invented brain with known truth."""
