"""Interrupt the demo sweep again and again, resume it, and compare the product with that of an uninterrupted run.

    .venv/bin/python scripts/check_resume.py UNINTERRUPTED_RUN [interruptions]

UNINTERRUPTED_RUN is the folder of the finished demo map (runs/osmate_on_germanene/results/map.run). Interruptions come
by Ctrl-C (SIGINT) after seeded random times. Exit code 1 if the products differ, times and hosts aside.
"""

import random
import signal
import subprocess
import sys
import tempfile
from pathlib import Path

from kondomf.sweep import compare_products, open_run

SWEEP = Path(__file__).parent.parent / "runs" / "osmate_on_germanene" / "sweep.toml"
INTERRUPTED = 130


def main() -> None:
    if len(sys.argv) < 2:
        sys.exit(__doc__)
    reference = Path(sys.argv[1])
    interruptions = int(sys.argv[2]) if len(sys.argv) > 2 else 3
    pace = open_run(reference).summary()
    whole = (pace.seconds_per_point or 1.0) * pace.total
    rng = random.Random(1)
    with tempfile.TemporaryDirectory() as folder:
        run = Path(folder) / "map.run"
        kondomf = Path(sys.executable).with_name("kondomf")
        command = [str(kondomf), "sweep", str(SWEEP), "--run", str(run), "--workers", "2"]
        for number in range(interruptions + 1):
            process = subprocess.Popen(command, start_new_session=True)
            try:
                limit = None if number == interruptions else rng.uniform(0.1, 0.9) * whole / interruptions
                code = process.wait(limit)
            except subprocess.TimeoutExpired:
                process.send_signal(signal.SIGINT)
                code = process.wait()
            print(f"start {number + 1}: exit code {code}, {open_run(run).summary().done} points done", flush=True)
            if code not in (0, INTERRUPTED):
                sys.exit(f"unexpected exit code {code}")
        differences = compare_products(reference / "run.h5", run / "run.h5")
    print("\n".join(differences) or "the products are the same, times and hosts aside")
    sys.exit(1 if differences else 0)


if __name__ == "__main__":
    main()
