"""``python -m condyle`` is the command line."""

from condyle.cli import main

main()
