"""Where dose is asked for: voxel grids, phantoms, CT series, structures, HU calibration."""
