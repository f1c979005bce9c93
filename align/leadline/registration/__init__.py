"""Stack to atlas: orientation, affine, deformation, quality."""
