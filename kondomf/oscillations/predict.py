"""The prediction an experimenter asks for: amplitudes, frequency and where they leave Lifshitz-Kosevich."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kondomf.effective import FourBandModel
from kondomf.errors import InputError
from kondomf.oscillations.curves import AmplitudeTable, Trace, amplitude_table, trace
from kondomf.oscillations.lifshitz_kosevich import dingle_broadening_meV
from kondomf.oscillations.pole_sum import Broadening, fermi_line_frequencies_T, unhybridized_frequency_T
from kondomf.units import BOLTZMANN

Array = NDArray[np.float64]

TRACE_POINTS = 2000
TRACE_HARMONICS = 10


@dataclass(frozen=True)
class Prediction:
    """Amplitudes over fields and temperatures, a trace over the same fields, and what sums them up.

    frequency_T: of the unhybridized crossing, where pi k_B T or b dominates; low_temperature_frequencies_T: of the
    lines where the hybridized bands cross the Fermi level; maximum_K (N_B,): temperature of the largest amplitude at
    each field; departure (N_B,): largest |relative - lk_relative| of each field.
    """

    model: FourBandModel
    table: AmplitudeTable
    trace: Trace
    frequency_T: float
    low_temperature_frequencies_T: list[float]
    dingle_K: float

    @property
    def maximum_K(self) -> Array:
        return np.asarray(self.table.temperatures_K[self.table.amplitude.argmax(axis=1)])

    @property
    def departure(self) -> Array:
        return np.asarray(np.abs(self.table.relative - self.table.lk_relative).max(axis=1))

    def rows(self) -> list[tuple[str, str]]:
        table = self.table
        lines = ", ".join(f"{f:.6g} T" for f in self.low_temperature_frequencies_T)
        rows = [
            ("frequency", f"{self.frequency_T:.6g} T (unhybridized crossing)"),
            ("as T goes to 0", lines or "none: a gap at the Fermi level"),
            ("cyclotron mass", f"{table.mass:.5g} m_e (electrons without hybridization)"),
            ("harmonic", f"{table.harmonic} of the {table.observable.replace('_', ' ')}"),
        ]
        for i, field in enumerate(table.fields_T):
            largest = table.amplitude[i].max()
            text = (
                f"largest amplitude {largest:.3g} {table.unit} at {self.maximum_K[i]:.3g} K, "
                f"differs from Lifshitz-Kosevich by up to {self.departure[i]:.2g} of the largest amplitude"
            )
            rows.append(
                (f"at {field:g} T", text if largest > 0 else "no oscillation: the amplitude is below any number")
            )
        if self.model.temperature_meV is not None:
            kelvin = self.model.temperature_meV / BOLTZMANN
            rows.append(("parameters", f"frozen at their values at {kelvin:.3g} K; b itself falls with temperature"))
        return rows

    def to_dict(self) -> dict[str, Any]:
        table = self.table
        return {
            "model": self.model.to_dict(),
            "frequency_T": self.frequency_T,
            "low_temperature_frequencies_T": self.low_temperature_frequencies_T,
            "cyclotron_mass_m_e": table.mass,
            "dingle_temperature_K": self.dingle_K,
            "observable": table.observable,
            "unit": table.unit,
            "harmonic": table.harmonic,
            "fields_T": table.fields_T.tolist(),
            "temperatures_K": table.temperatures_K.tolist(),
            "amplitude": table.amplitude.tolist(),
            "lk_amplitude": table.lk_amplitude.tolist(),
            "temperature_of_maximum_K": self.maximum_K.tolist(),
            "largest_departure": self.departure.tolist(),
        }


def predict(
    model: FourBandModel,
    fields_T: Sequence[float],
    temperatures_K: Sequence[float],
    *,
    harmonic: int = 1,
    observable: str = "magnetization",
    dingle_K: float = 0.0,
) -> Prediction:
    """Amplitudes at fields (tesla) and temperatures (kelvin), and a trace between the outer fields at the lowest one.

    dingle_K: Dingle temperature of the electrons; the spinons stay sharp. One field gives a trace of three periods.
    Raises InputError: a field or temperature not above zero, an unknown observable, E_D = 0.
    """
    if model.dirac_energy_meV == 0:
        raise InputError(
            "E_D = 0: the Dirac point lies at the Fermi level and there is no orbit; dope the conduction layer"
        )
    broadening = Broadening(electron_meV=float(dingle_broadening_meV(dingle_K)))
    table = amplitude_table(model, fields_T, temperatures_K, harmonic, observable, broadening=broadening)
    frequency = unhybridized_frequency_T(model)
    low, high = 1 / table.fields_T.max(), 1 / table.fields_T.min()
    if low == high:
        high = low + 3 / frequency
    inverse = np.linspace(low, high, TRACE_POINTS)
    return Prediction(
        model=model,
        table=table,
        trace=trace(model, 1 / inverse, float(table.temperatures_K.min()), TRACE_HARMONICS, broadening=broadening),
        frequency_T=frequency,
        low_temperature_frequencies_T=fermi_line_frequencies_T(model),
        dingle_K=dingle_K,
    )
