"""``python -m scanfit.cli``, for where the ``scanfit`` script is not on the path."""

from scanfit.cli.main import main

main()
