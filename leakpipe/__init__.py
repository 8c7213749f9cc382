"""leakpipe: leakage of an error-corrected memory, from recordings to a run-log block."""

__version__ = "0.1.0"
