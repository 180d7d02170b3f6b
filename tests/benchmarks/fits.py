"""Fits to synthetic data with 1 % noise: is the truth recovered, is the standard deviation right, are pairs that cannot
be separated reported?

    python tests/benchmarks/fits.py [seeds]

A minute or two per ten seeds. Every seed draws new noise; the truth is our own model on the same mesh.
"""

import sys
from dataclasses import dataclass

import numpy as np
import pandas as pd

import fem_carriers as fc
from fem_carriers.studies.fit import fit
from fem_carriers.studies.fit_model import FitModel
from fem_carriers.studies.measured import measurement

NOISE = 0.01
LEVEL = -3.0
EXTERNAL = "external_quantum_efficiency_percent"
WAVELENGTHS_NM = np.arange(400.0, 1101.0, 20.0)
POSITIONS_UM = np.arange(0.0, 401.0, 10.0)


def solar_cell(lifetime_us, srv_cm_per_s):
    """A 180 µm cell with a junction all over the front."""
    base = fc.Base("p", doping_per_cm3=1e16, thickness_um=180, lifetime_us=lifetime_us)
    finger = fc.Strip("finger", 40, contact=fc.Contact("front", 1))
    front = fc.Face(fc.Surface(J0_fA_per_cm2=50, layer=fc.DopedLayer("n", 90)), [finger])
    rear = fc.Surface(srv_cm_per_s=srv_cm_per_s)
    return fc.UnitCell(base, 1000, front=front, rear=rear, light=fc.Light.sunlight(0.05))


def thin_wafer(lifetime_us, srv_cm_per_s):
    """Junctions under the fingers alone; across 60 µm only the sum of bulk and rear recombination counts."""
    base = fc.Base("p", doping_per_cm3=1e16, thickness_um=60, lifetime_us=lifetime_us)
    junction = fc.DopedLayer("n", 90)
    finger = fc.Strip("finger", 40, J0_fA_per_cm2=50, layer=junction, contact=fc.Contact("front", 1))
    rear = fc.Surface(srv_cm_per_s=srv_cm_per_s)
    return fc.UnitCell(base, 800, front=fc.Face(fc.Surface(srv_cm_per_s=10), [finger]), rear=rear)


@dataclass(frozen=True)
class Case:
    """A truth, where the fit starts, and what is measured."""

    cell: object
    truth: tuple
    start: tuple
    positions: object
    settings: dict

    @property
    def parameters(self):
        return {"base.lifetime_us": (0.3, 300.0), "rear.srv_cm_per_s": (1.0, 1e6)}

    def fitted(self, seed):
        """A fit to noisy data; the noise is relative."""
        x = "x_um" if self.settings else "wavelength_nm"
        blank = pd.DataFrame({x: self.positions, EXTERNAL: 50.0 + 0 * self.positions})
        model = FitModel(self.cell(*self.truth), [measurement(blank, **self.settings)], LEVEL)
        exact = model.predict(dict(zip(self.parameters, self.truth, strict=True)))
        noise = NOISE * np.random.default_rng(seed).normal(size=exact.size)
        measured = pd.DataFrame({x: self.positions, EXTERNAL: exact * (1 + noise), "error_percent": NOISE * exact})
        measured = measured[exact > 0.5]
        return fit(self.cell(*self.start), measurement(measured, **self.settings), self.parameters, level=LEVEL)


SEPARABLE = Case(solar_cell, (8.0, 3e3), (30.0, 200.0), WAVELENGTHS_NM, {})
INSEPARABLE = Case(
    thin_wafer, (20.0, 150.0), (60.0, 300.0), POSITIONS_UM, {"spot_diameter_um": 30.0, "wavelength_nm": 850.0}
)


def recovered(seeds):
    """Per seed and parameter: (logarithm of fitted over true value, its standard deviation)."""
    rows = []
    for seed in seeds:
        table = SEPARABLE.fitted(seed).table
        off = np.log(table["value"].to_numpy() / np.array(SEPARABLE.truth))
        rows.append(np.stack([off, (table["standard_deviation"] / table["value"]).to_numpy()], axis=1))
    return np.array(rows)


def reported(seeds):
    """How many fits of the pair that cannot be separated say so of either of the two."""
    count = 0
    for seed in seeds:
        partners = dict(
            zip(*(INSEPARABLE.fitted(seed).table[c] for c in ("parameter", "inseparable_from")), strict=True)
        )
        lifetime, srv = INSEPARABLE.parameters
        count += partners[lifetime] == srv or partners[srv] == lifetime
    return count


def main(seeds=100):
    rows = recovered(range(seeds))
    for i, name in enumerate(SEPARABLE.parameters):
        off, deviation = rows[:, i].T
        within = int((np.abs(off) <= 2 * deviation).sum())
        ratio = float(np.median(deviation) / off.std(ddof=1))
        print(f"{name}: truth within 2 standard deviations in {within} of {seeds}; reported over actual {ratio:.3f}")
    print(f"pair that cannot be separated reported in {reported(range(seeds))} of {seeds}")


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
