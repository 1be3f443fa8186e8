"""``python -m starfathom`` is the ``starfathom`` command."""

from starfathom.cli import main

if __name__ == "__main__":
    main()
