"""`python -m sampler` is the command line."""

from sampler.cli.main import main

if __name__ == "__main__":
    main()
