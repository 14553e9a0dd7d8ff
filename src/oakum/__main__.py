"""`python -m oakum`."""

from oakum.cli import main

main()
