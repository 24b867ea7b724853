"""`python -m loopfit`."""

from loopfit.cli.main import main

main()
