"""``python -m qwfx`` is the command ``qwfx``."""

from qwfx.cli import main

main()
