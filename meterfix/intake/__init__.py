"""Data in: the site file to a model; log bytes to readings and problems."""
