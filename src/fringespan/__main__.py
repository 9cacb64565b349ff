"""`python -m fringespan` does what the command `fringespan` does."""

from fringespan.command_line import main

main()
