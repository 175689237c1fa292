"""`python -m bandproof.simulated_instruments`: a simulated bench as a process of its own."""

import sys

from bandproof.simulated_instruments.bench import serve_until_closed


def main(arguments: list[str]) -> int:
    """Run the command and return its exit code."""
    if arguments == ["--world"]:
        serve_until_closed(sys.stdin, sys.stdout)
        return 0
    sys.stderr.write("usage: python -m bandproof.simulated_instruments --world < WORLD.json\n")
    return 2


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
