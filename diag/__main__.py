"""The `diag` command."""

from diag.cli import main

if __name__ == "__main__":
    main()
