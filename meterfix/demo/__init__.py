"""The example site and its seeded simulator, with physics of its own."""
