"""``python -m dosewright``."""

from dosewright.cli import main

if __name__ == "__main__":  # worker processes of a sweep import this module again
    raise SystemExit(main())
