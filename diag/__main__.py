"""The `diag` command."""

import gc
import sys


def main() -> None:
    """Runs the command; Ctrl-C while it is still loading shows no traceback either."""
    try:
        gc.disable()  # modules are no garbage: looking for some costs a tenth of a second
        from diag.cli import main as command

        gc.enable()
        command()
    except KeyboardInterrupt:
        sys.exit(130)


if __name__ == "__main__":
    main()
