"""Install kondomf and run the main job on the invented demo heterostructure.

    python3 scripts/demo.py

Phase map, line cuts, bands of one point, effective model of the heavy Fermi liquid at 1 K and its quantum oscillations,
into runs/osmate_on_germanene/results/. It can be interrupted and run again: finished points of the map are kept.
"""

import resource
import time
from pathlib import Path

from environment import BIN, ROOT, install, run

WORKERS = 2


def main() -> None:
    began = time.monotonic()
    install()
    demo = Path("runs/osmate_on_germanene")
    results = demo / "results"
    (ROOT / results).mkdir(exist_ok=True)
    kondomf = BIN / "kondomf"

    run(kondomf, "check", demo / "material.toml")
    run(kondomf, "sweep", demo / "sweep.toml", "--run", results / "map.run", "--workers", str(WORKERS))
    run(kondomf, "map", results / "map.run", "--figure", results / "map.png", "--overwrite")
    cuts = ("--cut", "conduction_layer.filling=0.76", "--cut", "conduction_layer.filling=0.96")
    run(kondomf, "map", results / "map.run", *cuts, "--figure", results / "cuts.png", "--overwrite")
    state = ("--state", results / "state.h5", "--json", results / "state.json")
    run(kondomf, "solve", demo / "material.toml", *state, "--overwrite")
    run(kondomf, "bands", results / "state.h5", "--figure", results / "bands.png", "--overwrite")
    model = results / "model.json"
    run(kondomf, "effective", demo / "heavy.toml", "--json", model, "--overwrite")
    figure = ("--figure", results / "oscillations.png", "--data", results / "oscillations.csv")
    run(kondomf, "oscillations", model, "--fields", "10,14,20", *figure, "--overwrite")

    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    print(f"\nresults are in {results}")
    print(
        f"took {time.monotonic() - began:.0f} s, {used.ru_utime + used.ru_stime:.0f} s of CPU, "
        f"largest process {used.ru_maxrss / 1024:.0f} MiB"
    )


if __name__ == "__main__":
    main()
