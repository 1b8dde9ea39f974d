"""The only code that opens or writes rasters and vectors.

`rasters` reads any raster onto a grid and writes cloud-optimised GeoTIFFs, `elevation` reads the terrain, `vectors`
reads points and polygons and writes GeoPackages. Everything a user can get wrong comes back as a list of
`basinwright.errors.Problem`, all at once.
"""
