"""Three dimensions: water-equivalent paths, pencils, star transport, the fold and its adjoint."""
