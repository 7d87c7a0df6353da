"""`python -m procgen` is the command `procgen`."""

from procgen.cli import main

main()
