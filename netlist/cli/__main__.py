"""``python -m netlist.cli`` is ``polewright``."""

from netlist.cli import main

main()
