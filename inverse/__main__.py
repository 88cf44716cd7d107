"""``python -m inverse`` is the same as the command."""

from inverse.cli import main

main()
