"""The command line and its tables: shows stored figures, never recomputes them."""
