"""`python -m scantling` is the installed command."""

from scantling.cli.entry import main

if __name__ == "__main__":
    main()
