"""``python -m demilune``."""

from demilune.cli import main

main()
