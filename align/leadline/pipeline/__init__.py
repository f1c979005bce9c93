"""The order of the stages; what is skipped, resumed and recorded."""
