"""``python -m plant2`` is the ``plant2`` command."""

from plant2.cli import main

main()
