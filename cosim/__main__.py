"""`python -m cosim` is the same as the command `qcosim`."""

from cosim.cli import main

if __name__ == "__main__":
    main()
