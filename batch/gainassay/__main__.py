"""`python -m gainassay` is the command `gainassay`."""

from gainassay.cli import main

main()
