"""HTTP: decode, one call, encode."""
