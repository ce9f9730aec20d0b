"""``python -m evidence``: the same program as ``evidence``."""

from evidence.cli import main

if __name__ == "__main__":
    main(prog_name="evidence")
