"""Install kondomf with its development tools and run the tests.

python3 scripts/test.py [options for pytest]
"""

import os
import sys

from environment import BIN, install, run


def main() -> None:
    # Two processes share the work; a second BLAS thread in each would only get in the way.
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    install("[dev]")
    run(BIN / "python", "-m", "pytest", "-n", "2", *sys.argv[1:])


if __name__ == "__main__":
    main()
