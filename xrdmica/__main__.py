"""``python -m xrdmica``."""

from xrdmica.cli.main import run

if __name__ == "__main__":
    run()
