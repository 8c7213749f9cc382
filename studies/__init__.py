"""Long statistical runs, started by `make study`."""
