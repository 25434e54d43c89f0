"""Start the command line with ``python -m fhiro2``."""

from fhiro2.cli import main

main()
