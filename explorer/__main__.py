"""`python -m explorer` is the command line."""

from explorer.cli import main

main()
