"""What a run leaves behind: tables, their schema, layers, rasters, and a few words on the screen."""
