"""``python -m trapd.cli``: the same program where its script is not on the path."""

from trapd.cli import main

main()
