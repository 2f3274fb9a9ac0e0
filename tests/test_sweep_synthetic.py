"""An invented material, sweeps over it and cheap point functions for the tests to run instead of physics."""

import os
import signal
import time
from pathlib import Path

import numpy as np
import pytest

from kondomf.sweep.record import PointResult

MATERIAL = """
name = "invented for tests"
[spin_layer]
lattice_constant_angstrom = 5.0
kitaev_meV = -6.0
[conduction_layer]
lattice_constant_angstrom = 4.0
hopping_meV = 1000.0
filling = 0.99
[kondo]
coupling_meV = 900.0
[mean_field]
temperature_K = 1.0
"""
SWEEP = """
material = "material.toml"
phases = ["any", "heavy-fermi-liquid"]
[axes]
"kondo.coupling_meV" = { from = 0.0, to = 600.0, points = 3 }
"conduction_layer.filling" = [0.7, 0.8, 0.95, 1.0]
"""
SHAPE, SIZE = (3, 4), 24
BAD_POINT = (1, 2)  # coupling 300, filling 0.95


def write_sweep(folder: Path, sweep: str = SWEEP) -> Path:
    """Write the material and a sweep over it; returns the path of the sweep."""
    folder.mkdir(exist_ok=True)
    (folder / "material.toml").write_text(MATERIAL)
    path = folder / "sweep.toml"
    path.write_text(sweep)
    return path


def _is_bad(material):
    return (material["kondo"]["coupling_meV"], material["conduction_layer"]["filling"]) == (300.0, 0.95)


def wave(material, seed, parent):
    """Depends on material, seed and the whole chain of parents; fails at one point. Takes its time if told to."""
    time.sleep(float(os.environ.get("SYNTHETIC_PAUSE_SECONDS", "0")))
    if _is_bad(material):
        raise RuntimeError("no such wave\nat this point")
    coupling, filling = material["kondo"]["coupling_meV"], material["conduction_layer"]["filling"]
    so4 = material["mean_field"]["exchange_form"] == "so4"
    start = np.zeros(3) if parent is None else parent["fields_meV"]
    fields = np.sin(start + coupling / 7 + filling * np.arange(3) + so4) + np.random.default_rng(seed).random(3)
    scalars = {
        "free_energy_meV_per_cell": float(fields.sum()),
        "evaluations": 7 + int(coupling),
        "gap_meV": None if filling == 1.0 else filling,
        "phase": "cold" if parent is None else "warm",
    }
    spectrum = np.outer(fields, fields) * 1j
    return PointResult("saddle" if filling == 0.8 else "minimum", scalars, {"fields_meV": fields, "spectrum": spectrum})


def endless(material, seed, parent):
    """Never ends."""
    time.sleep(600)


def deadly(material, seed, parent):
    """The same wave, but one point kills its worker."""
    if _is_bad(material):
        os.kill(os.getpid(), signal.SIGKILL)
    return wave(material, seed, parent)


def greedy(material, seed, parent):
    """Writes into the arrays of its parent, which belong to the record."""
    if parent is not None:
        parent["fields_meV"][0] = 0.0
    return wave(material, seed, parent)


def wordy(material, seed, parent):
    """Returns an array that is no numbers."""
    return PointResult("minimum", {}, {"labels": np.array(["a", "b"])})


def test_the_wave_depends_on_parent_and_seed():
    material = {
        "kondo": {"coupling_meV": 1.0},
        "conduction_layer": {"filling": 0.7},
        "mean_field": {"exchange_form": "so4"},
    }
    root = wave(material, 1, None)
    assert not np.array_equal(root.arrays["fields_meV"], wave(material, 2, None).arrays["fields_meV"])
    assert not np.array_equal(root.arrays["fields_meV"], wave(material, 1, root.arrays).arrays["fields_meV"])
    with pytest.raises(RuntimeError):
        wave({"kondo": {"coupling_meV": 300.0}, "conduction_layer": {"filling": 0.95}}, 1, None)
