"""Where dose is asked for: voxel grids, phantoms, CT series, structures and HU calibration."""
