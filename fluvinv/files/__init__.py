"""Files in and out: settings, rasters, vectors, tables, the record. The only code that takes a path."""
