"""A protection scheme logic simulator."""
