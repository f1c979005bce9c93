"""Files to model values and back; one module per family of formats."""
