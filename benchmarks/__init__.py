"""Speeds as ratios within one run, started by `make bench`."""
