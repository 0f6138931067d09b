"""Run the command as a module: python -m spectral_cli."""

from __future__ import annotations

from .main import main

if __name__ == "__main__":
    main(prog_name="wedgewright")
