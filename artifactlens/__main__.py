"""``python -m artifactlens``."""

from artifactlens.cli import main

if __name__ == "__main__":
    main(prog_name="artifactlens")
