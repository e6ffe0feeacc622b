"""``python -m afterkick``."""

from afterkick.cli import main

main(prog_name="afterkick")
