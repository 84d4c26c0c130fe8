"""``python -m bench`` is the ``evenarm`` command."""

from bench.cli import main

if __name__ == "__main__":
    main()
