"""``python -m tests.benchmarks NAME``: long measurements and ratios, each printing figure, bound and machine."""

import importlib
import os
import pkgutil
import platform
import sys
from pathlib import Path


def names() -> list[str]:
    """Return the benchmarks there are: the modules of this folder with a ``main``."""
    found = [module.name for module in pkgutil.iter_modules([str(Path(__file__).parent)])]
    return sorted(name for name in found if not name.startswith("_"))


def main(arguments: list[str]) -> int:
    """Run the benchmarks named (or ``all``); return 0 when each figure is within its bound."""
    wanted = names() if arguments == ["all"] else arguments
    unknown = [name for name in wanted if name not in names()]
    if unknown or not wanted:
        print(f"usage: python -m tests.benchmarks all | NAME...   names: {', '.join(names())}")
        return 2
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # as the command line does, before numpy is loaded
    print(f"machine: {platform.machine()}, Python {platform.python_version()}, {platform.system()}")
    good = True
    for name in wanted:
        print(f"--- {name}")
        good = bool(importlib.import_module(f"tests.benchmarks.{name}").main()) and good
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
