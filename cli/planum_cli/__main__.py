"""`python -m planum_cli`."""

from planum_cli.main import main

main()
