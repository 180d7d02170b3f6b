"""Measured data refused in one sentence, fits that recover the truth, parameters that cannot be separated, plots."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from simple_cells import constant_base, junction

import fem_carriers as fc
from fem_carriers.output.fit_plot import plot_fit
from fem_carriers.studies.fit import fit, statement, with_deviation
from fem_carriers.studies.fit_model import FitModel
from fem_carriers.studies.fit_search import Verdict
from fem_carriers.studies.measured import measurement, read_measurement

EXTERNAL = "external_quantum_efficiency_percent"
GOOD = f"wavelength_nm,{EXTERNAL}\n400,80\n500,85\n600,90\n700,91\n800,90\n"
SCRIPT = Path(__file__).parent / "benchmarks" / "fits.py"


@pytest.fixture(scope="module")
def benchmark():
    spec = importlib.util.spec_from_file_location("fits", SCRIPT)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


class TestMeasuredData:
    def write(self, tmp_path, text):
        path = tmp_path / "scan.csv"
        path.write_text(text)
        return path

    def test_kinds(self, tmp_path):
        data = read_measurement(self.write(tmp_path, "# Tuesday\n" + GOOD), reflectance=0.1)
        assert (data.kind, data.x, data.y, data.errors) == ("quantum efficiency", "wavelength_nm", EXTERNAL, None)
        text = f"{EXTERNAL},x_um,error_percent\n3,30,0.1\n2,20,0.2\n1,10,0.1\n0.5,0,0.3\n"
        scan = read_measurement(self.write(tmp_path, text), spot_diameter_um=10, wavelength_nm=900)
        assert scan.kind == "scan"
        assert scan.table["x_um"].tolist() == [0, 10, 20, 30]
        assert scan.errors.tolist() == [0.3, 0.1, 0.2, 0.1]
        curve = read_measurement(self.write(tmp_path, "voltage_V,current_mA_per_cm2\n0,35\n.3,34\n.5,30\n.6,-2\n"))
        assert curve.kind == "current-voltage curve"

    @pytest.mark.parametrize(
        ("text", "complaint"),
        [
            (GOOD.replace("wavelength_nm", "wavelength"), "the column 'wavelength' without its unit"),
            (GOOD.replace("wavelength_nm", "wavelength_um"), "the column 'wavelength_um': allowed is wavelength_nm"),
            (GOOD.replace("_percent", ""), "without its unit"),
            (GOOD.replace(",", ";"), "columns separated by semicolons"),
            (GOOD.replace(",", "\t"), "columns separated by tabs"),
            (GOOD.replace("600,90", "450,90"), "wavelength_nm that turns or repeats after 500"),
            (GOOD.replace("600,90", "500,90"), "turns or repeats"),
            (GOOD.replace("600,90", "600,-1"), f"{EXTERNAL} = -1: allowed is 0 to 100 %"),
            (GOOD.replace("600,90", "600,101"), f"{EXTERNAL} = 101: allowed is 0 to 100 %"),
            (GOOD.replace("600,90", "600,ninety"), "'ninety' in row 3"),
            (GOOD.replace("600,90", "600,"), "an empty field in row 3"),
            (GOOD.replace("600,90", "600,90,1"), "cannot be read as CSV"),
            (GOOD.rpartition("700")[0], "3 points: allowed is at least 4"),
            (GOOD.replace("400", "0.4").replace("500", "0.5"), "wavelength_nm = 0.4"),
            ("", "cannot be read as CSV"),
            ("voltage_V,wavelength_nm\n1,2\n", "columns voltage_V, wavelength_nm"),
            ("x_um,external_quantum_efficiency_percent\n0,1\n1,2\n2,3\n3,4\n", "a scan without spot_diameter_um"),
            (GOOD.replace("\n", ",1\n").replace("percent,1", "percent,error_percent").replace("85,1", "85,0"),
             "error_percent = 0: allowed is standard deviations above 0"),
        ],
    )  # fmt: skip
    def test_refused_in_one_sentence(self, tmp_path, text, complaint):
        with pytest.raises(fc.InputError, match=complaint) as error:
            read_measurement(self.write(tmp_path, text))
        assert len(error.value.complaints) == 1
        assert "\n" not in str(error.value)

    def test_missing_file_and_settings(self, tmp_path):
        with pytest.raises(fc.InputError, match="cannot be read"):
            read_measurement(tmp_path / "none.csv")
        with pytest.raises(fc.InputError, match="the setting 'spot_um'"):
            read_measurement(self.write(tmp_path, GOOD), spot_um=3)


class TestFits:
    def test_truth_is_recovered(self, benchmark):
        """The long version takes 100 seeds: `python tests/benchmarks/fits.py`."""
        rows = benchmark.recovered(range(4))
        off, deviation = rows[..., 0], rows[..., 1]
        assert (np.abs(off) <= 3 * deviation).all()
        assert (np.abs(off) <= 2 * deviation).sum() >= 6

    def test_pair_that_cannot_be_separated(self, benchmark):
        """Across a wafer that is thin beside the diffusion length only 1/τ + S/W counts (both are said to be open)."""
        found = benchmark.INSEPARABLE.fitted(0)
        assert not found.table["determined"].any()
        assert "base.lifetime cannot be separated from rear.srv" in str(found)
        wafer_cm = 60e-4
        low, high = found.table.loc[0, ["lowest", "highest"]]
        rate = lambda lifetime_us, srv: 1e6 / lifetime_us + srv / wafer_cm
        true = rate(20.0, 150.0)
        assert low == pytest.approx(1e6 / true, rel=0.15)  # without any rear recombination
        assert high == pytest.approx(300.0)
        srv_low, srv_high = found.table.loc[1, ["lowest", "highest"]]
        assert srv_low == pytest.approx(1.0)
        assert rate(300.0, srv_high) == pytest.approx(true, rel=0.2)

    def test_current_voltage_curve(self):
        """Exact data: the truth comes back; derivatives by the adjoint against differences."""
        front = fc.Face(
            fc.Surface(J0_fA_per_cm2=30, layer=fc.DopedLayer("n", 120)),
            [fc.Strip("finger", 40, contact=fc.Contact("front", 2))],
        )
        rear = fc.Surface(J0_fA_per_cm2=20, contact=fc.Contact("rear", 1))
        base = fc.Base("p", resistivity_ohm_cm=1, thickness_um=160, lifetime_us=200)
        cell = fc.UnitCell(base, 1500, front=front, rear=rear, light=fc.Light.sunlight(0.03))
        truth = {"front.J0_fA_per_cm2": 30.0, "front.finger.contact.contact_resistivity_mohm_cm2": 2.0}
        volts = np.array([0.0, 0.5, 0.58, 0.63])
        blank = measurement(pd.DataFrame({"voltage_V": volts, "current_mA_per_cm2": 0 * volts}))
        model = FitModel(cell, [blank], -4)
        exact = model.predict(truth)
        for name, value in truth.items():
            sides = [model.predict(truth | {name: value * (1 + s)}) for s in (1e-3, -1e-3)]
            wanted = (sides[0] - sides[1]) / (2e-3 * value)
            assert model.slopes(truth, name, 1e-4) == pytest.approx(wanted, rel=1e-4, abs=1e-5 * np.abs(wanted).max())
        data = measurement(pd.DataFrame({"voltage_V": volts, "current_mA_per_cm2": exact}))
        start = fc.changed(cell, {"front.J0_fA_per_cm2": 100.0})
        resistivity = "front.finger.contact.contact_resistivity_mohm_cm2"
        bounds = {"front.J0_fA_per_cm2": (1, 1e3), resistivity: (0.1, 50)}
        found = fit(start, data, bounds, error=0.02, level=-4)
        for name, value in truth.items():
            assert found.values[name] == pytest.approx(value, rel=1e-3)
        assert found.cell.front.surface.J0_fA_per_cm2 == found.values["front.J0_fA_per_cm2"]

    def test_scatter_takes_the_place_of_errors(self, benchmark, tmp_path):
        """Without an error column: the standard error of a mean, (1 − R) with R = 0.24; and the plot."""
        cell = fc.UnitCell(
            constant_base(30, 8.0, thickness_um=180.0), 600, front=junction("front"), rear=fc.Surface(srv_cm_per_s=1e4)
        )
        x = np.arange(0.0, 301.0, 30.0)
        how = {"absorption_per_cm": 60.0, "spot_diameter_um": 20.0, "reflectance": 0.2}
        blank = measurement(pd.DataFrame({"x_um": x, EXTERNAL: 1 + 0 * x}), **how)
        exact = FitModel(cell, [blank], -3).predict({"reflectance_factor": 1.2})
        assert exact.std() < 1e-6  # nothing varies across the piece
        noise = np.random.default_rng(3).normal(size=x.size)
        data = measurement(pd.DataFrame({"x_um": x, EXTERNAL: exact + 0.1 * noise}), name="scan 1", **how)
        found = fit(cell, [data], {"reflectance_factor": (0.5, 2.0)}, level=-3)
        assert not found.errors_known
        expected = 0.1 * noise.std(ddof=1) / np.sqrt(x.size) / (exact.mean() / (1 - 0.24)) / 0.2
        assert found.table["standard_deviation"][0] == pytest.approx(expected, rel=0.01)
        assert abs(found.values["reflectance_factor"] - 1.2) < 3 * expected
        figure = plot_fit(found, tmp_path / "fit.png")
        assert figure.axes[1].get_ylabel() == "residual (%)"
        assert (tmp_path / "fit.png").stat().st_size > 10_000
        with pytest.raises(fc.InputError, match="curve = 'other'"):
            plot_fit(found, curve="other")

    @pytest.mark.parametrize(
        ("parameters", "more", "text"),
        [
            ({}, {}, "names with bounds"),
            ({"base.life": (1, 2)}, {}, "path 'base.life'"),
            ({"base.lifetime_us": (2, 1)}, {}, "the lower bound first"),
            ({"base.lifetime_us": 3}, {}, "lowest, highest"),
            ({"base.lifetime_us": (0, 1)}, {"log_scaled": ["base.lifetime_us"]}, "bounds above 0"),
            ({"rear.J0_fA_per_cm2": (1, 10)}, {}, "without a value to start from"),
            ({"base.lifetime_us": (1, 10)}, {"error": 0}, "error = 0"),
            ({"spot_diameter_um": (1, 10)}, {}, "without a value to start from"),
        ],
    )
    def test_refusals(self, tmp_path, parameters, more, text):
        table = pd.DataFrame({"wavelength_nm": [400, 500, 600, 700], EXTERNAL: [80, 85, 90, 91]})
        cell = fc.UnitCell(constant_base(30, 8.0), 600, front=junction("front"), rear=fc.Surface(srv_cm_per_s=1e4))
        with pytest.raises(fc.InputError, match=text):
            fit(cell, measurement(table), parameters, **more)

    def test_more_parameters_than_points(self):
        cell = fc.UnitCell(constant_base(30, 8.0), 600, front=junction("front"), rear=fc.Surface(srv_cm_per_s=1e4))
        table = pd.DataFrame({"wavelength_nm": [400, 500, 600, 700], EXTERNAL: [80, 85, 90, 91]})
        names = {
            "base.lifetime_us": (1, 9),
            "rear.srv_cm_per_s": (1, 2),
            "pitch_um": (500, 700),
            "reflectance_factor": (0.5, 2),
        }
        with pytest.raises(fc.InputError, match="4 points for 4 parameters"):
            fit(cell, measurement(table), names)


class TestWords:
    def test_numbers(self):
        assert with_deviation(41.234, 1.26) == "41.2 ± 1.3"
        assert with_deviation(2683.7, 584.3) == "2680 ± 580"
        assert with_deviation(1.0, 0.0) == "1"

    def test_statements(self):
        assert statement(Verdict("base.lifetime_us", 41.23, 3.04, 35, 47, True)) == "base.lifetime = 41.2 ± 3.0 µs"
        loose = Verdict("rear.srv_cm_per_s", 5, 90, 1, 300, False, ("base.lifetime_us",), at_low=True)
        text = "rear.srv cannot be separated from base.lifetime: rear.srv from 1 to 300 cm/s (up to the lower bound)"
        assert statement(loose).startswith(text)
        assert "is not determined by these data" in statement(Verdict("rear.srv_cm_per_s", 5, 90, 1, 300, False))
