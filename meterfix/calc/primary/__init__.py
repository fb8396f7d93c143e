"""Primary devices, one file per family, and the one flow solver."""
