"""``python -m softsensor`` is the same as the ``softsensor`` command."""

from softsensor.cli.main import main

if __name__ == "__main__":
    main()
