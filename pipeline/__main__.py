"""``python -m pipeline`` and the ``dealwake`` command."""

from __future__ import annotations


def main() -> None:
    """Run the command line."""
    from pipeline.cli import app

    app(prog_name="dealwake")


if __name__ == "__main__":
    main()
