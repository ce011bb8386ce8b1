"""`python -m bayesrange` is the command `bayesrange`."""

from bayesrange.commands import main

if __name__ == "__main__":
    raise SystemExit(main())
