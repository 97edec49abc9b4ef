"""``python -m printmetrics``."""

from printmetrics.cli import main

main(prog_name="printmetrics")
