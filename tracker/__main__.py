"""`python -m tracker` is `tracker`."""

from tracker.cli.main import run

if __name__ == "__main__":
    run()
