"""The examples of quantum efficiency, grain boundary and fit run, leave their files and say what physics says."""

import math

import numpy as np
import pytest
from example_files import assert_written

import fem_carriers as fc


def test_quantum_efficiency(example, capsys):
    """Wider base contacts cost more; the columns share out all photons; short waves all see the same collection."""
    module = example("quantum_efficiency")
    module.BASE_CONTACT_UM, module.WAVELENGTHS_NM = [200, 800], np.array([400, 600, 1000])
    losses, table = module.main()
    assert 0 < losses[200] < 0.2 * losses[800]
    parts = [c for c in table if c.startswith(("collected_", "lost_", "reflected", "escaped"))]
    assert table[parts].sum(axis=1).to_numpy() == pytest.approx(100, abs=1e-6)
    assert (table[f"error_bar_{module.EXTERNAL}"] < 1e-3 * table[module.EXTERNAL]).all()
    assert "electrical shading costs" in capsys.readouterr().out
    assert_written("quantum_efficiency.csv", "quantum_efficiency.png", "quantum_efficiency_scan.png")


def test_grain_boundary_scan(example):
    """The dip is symmetric about the boundary, grows with S, and is linear in S where S is small beside D/L."""
    module = example("grain_boundary_scan")
    module.VELOCITIES_CM_PER_S = [10, 20, 1e6]
    rows, scans = module.main()
    weak, double, strong = (row[1] for row in rows)
    assert double == pytest.approx(2 * weak, rel=0.01)
    assert strong > 50
    response = next(iter(scans.values()))[module.INTERNAL].to_numpy()
    assert response == pytest.approx(response[::-1], rel=1e-3)
    assert_written("grain_boundary_scan.csv", "grain_boundary_scan.png")


def test_finger_scan_fit(example, capsys):
    """From the file to "lifetime = … ± …, S cannot be separated from …"; the truth lies within three deviations."""
    module = example("finger_scan_fit")
    found = module.main()
    text = capsys.readouterr().out
    assert text.startswith("base.lifetime = ")
    assert "front.srv cannot be separated from base.lifetime" in text
    table = found.table.set_index("parameter")
    truth = {
        "base.lifetime_us": module.TRUTH["base.lifetime_us"],
        "reflectance_factor": module.TRUE_REFLECTANCE / module.REFLECTANCE,
        "spot_diameter_um": module.TRUE_SPOT_UM,
    }
    for name, value in truth.items():
        assert abs(table.loc[name, "value"] - value) < 3 * table.loc[name, "standard_deviation"]
    low, high = table.loc["front.srv_cm_per_s", ["lowest", "highest"]]
    assert low <= module.TRUTH["front.srv_cm_per_s"] <= high
    assert math.isfinite(found.chi_square)
    assert found.chi_square / found.degrees_of_freedom == pytest.approx(1, abs=4 * math.sqrt(2 / 47))
    assert isinstance(found.cell, fc.UnitCell)
    assert_written("finger_scan.csv", "finger_scan_fit.csv", "finger_scan_fit.png")


@pytest.mark.parametrize("target", [1.0, 0.1])
def test_error_bars_hold_the_truth(example, target):
    """Against a mesh two levels finer than the usual one; a solution, which has its mesh, is refused."""
    cell = example("quantum_efficiency").cell(500)
    column = "external_quantum_efficiency_percent"
    wavelengths = [400, 900, 1100]
    table = fc.quantum_efficiency(cell, wavelengths, target_error_percent=target, losses=False)
    truth = fc.quantum_efficiency(fc.problem(cell, level=2), wavelengths, losses=False)[column]
    bars = table[f"error_bar_{column}"]
    assert (np.abs(table[column] - truth) <= bars).all()
    assert (bars <= target / 100 * table[column]).all()
    assert list(table).index(f"error_bar_{column}") == 4
    dark = fc.solve_excess(fc.problem(cell, level=-4).changed(light=None))
    with pytest.raises(fc.InputError, match="whose mesh can be refined"):
        fc.quantum_efficiency(dark, [900], reflectance=0.0, target_error_percent=1)
