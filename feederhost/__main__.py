"""``python -m feederhost``."""

from feederhost.cli import main

main(prog_name="feederhost")
