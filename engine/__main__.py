"""`python -m polewise` is the command line too."""

from polewise.terminal.main import main

if __name__ == "__main__":
    main()
