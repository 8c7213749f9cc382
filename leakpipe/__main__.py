"""`python -m leakpipe`: the same as the `leakpipe` command."""

from leakpipe.cli import main

main()
