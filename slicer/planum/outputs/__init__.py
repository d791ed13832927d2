"""What leaves the program: rasters, NetCDF, GeoPackage, pictures, report."""
