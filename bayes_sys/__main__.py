"""``python -m bayes_sys`` is the command ``bayes-sys``."""

from bayes_sys.cli import main

main()
