"""``python -m lensrate``."""

from .cli import main

main()
