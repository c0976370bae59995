"""What everything is computed from: constants, particles, materials and data tables."""
