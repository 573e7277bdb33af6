"""One file per published method."""
