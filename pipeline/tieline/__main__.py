"""`python -m tieline`."""

from tieline.cli import main

main()
