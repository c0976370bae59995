"""A beam and what matter does to it: stopping, straggling, scattering, reactions in flight, decay."""
