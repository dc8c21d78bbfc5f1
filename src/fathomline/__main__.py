"""``python -m fathomline`` is the command line."""

from fathomline.cli import main

main()
