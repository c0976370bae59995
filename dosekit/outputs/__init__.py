"""What leaves the house: figures, tables, report, NetCDF, DICOM, the run record."""
