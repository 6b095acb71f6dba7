"""`python -m fhirgallop` is the command `fhirgallop`."""

from fhirgallop.cli.main import main

main()
