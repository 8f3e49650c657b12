"""Run the command line as ``python -m sta_prior``."""

from sta_prior.cli import main

if __name__ == "__main__":
    main()
