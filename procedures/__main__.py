"""``benchkit`` and ``python -m procedures``."""

from procedures.cli import app


def main() -> None:
    """Run the command line; leaves with the exit code of the contract."""
    app(prog_name="benchkit")


if __name__ == "__main__":
    main()
