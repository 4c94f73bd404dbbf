"""``python -m service`` is the command ``acceptance``."""

from service.cli import main

main()
