"""`python -m runner` is the same program as `kneemap`."""

from runner.commands import main

if __name__ == "__main__":
    main()
