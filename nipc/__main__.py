"""python -m nipc."""

from nipc.cli import main

main()
