"""Pure questions to an atlas: layers and tissue from names, label runs along a curve."""
