"""`python -m qa.cli` is the program too."""

from qa.cli import main

main()
