"""``python -m moire`` is the command line."""

from moire.cli.main import main

main()
