"""``python -m stillground``."""

from stillground.cli import main

main()
