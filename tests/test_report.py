"""The report: one page that needs nothing else; the drawing of the cell; two studies compared."""

import base64
import shutil
import subprocess
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner

import fem_carriers as fc
from fem_carriers.command import app
from fem_carriers.output import report_page
from fem_carriers.output.cell_drawing import cell_parts, draw_cell
from fem_carriers.output.report import write_report
from fem_carriers.studies.comparison import compare_studies
from fem_carriers.studies.optimum import optimum
from fem_carriers.studies.sampling import Normal
from fem_carriers.studies.study_run import run_study
from fem_carriers.studies.tolerance import tolerance

CHROMIUM = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)
EVIL = "<script>alert(1)</script><img src='http://example.org/x.png'>\\\" & co"
STUDY = f"""\
title = "{EVIL}"
question = "Which pitch <b>collects</b> most?"
compute = "collected_current"

[cell]
pitch_um = 300

[base]
doping_type = "p"
doping_per_cm3 = 1e16
thickness_um = 100
lifetime_us = 20

[front]
J0_fA_per_cm2 = 8

[[front.patches]]
shape = "strip"
name = "finger"
width_um = 60
layer = {{ doping_type = "n", sheet_resistance_ohm_per_sq = 90 }}
contact = {{ terminal = "front" }}

[[light]]
kind = "sunlight"

[sweep]    # --> <!-- ]]>
pitch_um = [200, 300, 450, 600]

[accuracy]
first_step_um = 8
growth = 3
"""
QUIET = {"processes": 1, "progress": False}


class Page(HTMLParser):
    """Tags, attributes and text of a page; refuses tags that do not close."""

    VOID = ("meta", "link", "img", "br")

    def __init__(self, text):
        super().__init__(convert_charrefs=True)
        self.tags, self.open, self.words = [], [], []
        self.feed(text)
        assert not self.open

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if "style" not in self.open:
            self.words.append(data)

    @property
    def text(self):
        return "".join(self.words)

    def all(self, tag):
        return [attrs for name, attrs in self.tags if name == tag]


@pytest.fixture(scope="module")
def ran(tmp_path_factory):
    """A study that has been run, and its report."""
    folder = tmp_path_factory.mktemp("report")
    (folder / "pitch.toml").write_text(STUDY)
    run_study(folder / "pitch.toml", **QUIET)
    return write_report(folder / "pitch.toml")


def law(cell):
    value = 24 - 400 / cell.pitch_um - (cell.pitch_um / 1500) ** 2 + 0.01 * cell.base.thickness_um
    return {"efficiency_percent": value, "error_bar_efficiency_percent": 0.01}


def simple():
    return fc.UnitCell(fc.Base("p", doping_per_cm3=1e16, thickness_um=150, lifetime_us=100), 1000.0)


class TestPage:
    def test_needs_nothing_else(self, ran):
        """No script, no link, no picture but those inside; the policy of the page forbids the rest."""
        page = Page(ran.read_text())
        assert ran.name == "pitch.html"
        assert not {"script", "iframe", "object", "embed", "form", "base", "a", "svg"} & {tag for tag, _ in page.tags}
        pictures = page.all("img")
        assert len(pictures) == 3
        for picture in pictures:
            assert picture["src"].startswith("data:image/png;base64,")
            assert base64.b64decode(picture["src"].partition(",")[2]).startswith(b"\x89PNG")
            assert len(picture["alt"]) > 30
        assert [link["href"] for link in page.all("link")] == ["data:,"]
        assert not [a for _, attrs in page.tags for a in attrs if a.startswith("on")]
        policy = next(m["content"] for m in page.all("meta") if "http-equiv" in m)
        assert policy.startswith("default-src 'none'")
        assert "url(" not in report_page.STYLE
        assert "@import" not in report_page.STYLE

    def test_text_of_the_study_is_text(self, ran):
        page = Page(ran.read_text())
        title = EVIL.replace('\\"', '"')
        assert page.text.count(title) >= 2
        assert "Which pitch <b>collects</b> most?" in page.text
        assert STUDY in page.text

    def test_says_everything(self, ran):
        text = Page(ran.read_text()).text
        for words in (
            "The cell", "Results", "At the best point", "How far to trust it", "Provenance", "To repeat it",
            "fem-carriers run pitch.toml && fem-carriers report pitch.toml pitch.html", "Limits of the model",
            "Cautions",
            "All 4 points", "no error bars", "largest residual of the carrier ledger", "SHA-256", "scikit-fem", "run 1",
            "4 points in", "best pitch",
        ):  # fmt: skip
            assert words in text, words

    def test_one_row_per_point_and_the_best_set_off(self, ran):
        page = Page(ran.read_text())
        assert len([r for r in page.all("tr") if r.get("class") == "best"]) == 1
        assert {h.get("scope") for h in page.all("th")} == {"col", "row"}
        assert page.all("html") == [{"lang": "en"}]

    @pytest.mark.skipif(CHROMIUM is None, reason="needs Chromium")
    def test_opens_in_a_browser(self, ran, tmp_path):
        """Headless Chromium: nothing on the console, no request but the file itself, and a PDF of a few pages."""
        log = tmp_path / "net.json"
        command = [CHROMIUM, "--headless", "--no-sandbox", "--disable-gpu", "--enable-logging=stderr", "--v=0",
                   f"--user-data-dir={tmp_path / 'profile'}", f"--log-net-log={log}", "--no-pdf-header-footer",
                   "--disable-background-networking", "--disable-component-update",
                   f"--print-to-pdf={tmp_path / 'page.pdf'}", ran.as_uri()]  # fmt: skip
        done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=True)
        assert "CONSOLE" not in done.stderr
        assert "example.org" not in log.read_text()
        assert (tmp_path / "page.pdf").read_bytes().startswith(b"%PDF")

    def test_best_optimum_tolerance_of_tables(self, tmp_path):
        """Reports from Python, with a table and what was found in it."""
        cell = simple()
        best = optimum(cell, {"pitch_um": (300, 2000)}, compute=law, **QUIET)
        path = write_report(best.table, tmp_path / "best.html", cell=cell, title="Best", outcome=best)
        text = Page(path.read_text()).text
        assert "largest efficiency" in text
        assert "as good from" in text
        scatter = tolerance(cell, {"base.thickness_um": Normal(150, 5)}, compute=law, **QUIET)
        path = write_report(scatter.table, tmp_path / "scatter.html", cell=cell, outcome=scatter)
        page = Page(path.read_text())
        assert "Share of cells that lie below" in page.text
        assert "no error bars" not in page.text
        assert len(page.all("img")) == 2

    def test_failures_and_warnings_are_in_it(self, tmp_path):
        columns = {"pitch_um": [1.0, 2.0, 3.0], "efficiency_percent": [20.0, np.nan, 21.0]}
        table = pd.DataFrame(columns | {"failure": ["", "the mesh <broke>", ""], "note": ["strained", "", "strained"]})
        page = Page(write_report(table, tmp_path / "t.html").read_text())
        assert "the mesh <broke> (1 of 3 points)" in page.text
        assert "strained (2 of 3 points)" in page.text
        assert "nan" not in page.words

    def test_refusals(self, tmp_path):
        (tmp_path / "new.toml").write_text(STUDY)
        with pytest.raises(fc.InputError, match="a store that a run has made"):
            write_report(tmp_path / "new.toml")
        with pytest.raises(fc.InputError, match="a table without rows"):
            write_report(pd.DataFrame({"a": []}), tmp_path / "t.html")
        with pytest.raises(fc.InputError, match=r"name ending in \.html"):
            write_report(pd.DataFrame({"a": [1.0]}), tmp_path / "t.pdf")


class TestCommand:
    def test_report(self, ran):
        out = ran.with_name("short.html")
        result = CliRunner().invoke(app, ["report", str(ran.with_suffix(".toml")), str(out), "--no-details"])
        assert result.exit_code == 0
        assert (result.stdout, out.exists()) == ("", True)
        assert "At the best point" not in Page(out.read_text()).text

    def test_compare(self, ran, tmp_path):
        (tmp_path / "longer.toml").write_text(STUDY.replace("lifetime_us = 20", "lifetime_us = 40"))
        result = CliRunner().invoke(app, ["compare", str(ran.with_suffix(".toml")), str(tmp_path / "longer.toml")])
        assert result.exit_code == 2
        run_study(tmp_path / "longer.toml", **QUIET)
        result = CliRunner().invoke(app, ["compare", str(ran.with_suffix(".toml")), str(tmp_path / "longer.toml")])
        assert result.exit_code == 0
        assert "base.lifetime_us: 20 → 40" in result.stdout


class TestComparison:
    def test_inputs_and_results(self, ran, tmp_path):
        changed = STUDY.replace("lifetime_us = 20", "lifetime_us = 40").replace("width_um = 60", "width_um = 80")
        (tmp_path / "other.toml").write_text(changed.replace("[200, 300, 450, 600]", "[300, 450, 900]"))
        run_study(tmp_path / "other.toml", **QUIET)
        found = compare_studies(ran.with_suffix(".toml"), tmp_path / "other.toml")
        named = {row.input: (row.first, row.second) for row in found.inputs.itertuples()}
        assert named == {
            "base.lifetime_us": ("20", "40"), "front.finger.width_um": ("60", "80"),
            "sweep.pitch_um": ("4 values", "3 values"),
        }  # fmt: skip
        assert found.points == (4, 3, 2)
        row = found.results.set_index("quantity").loc["collected_front_mA_per_cm2"]
        assert row["points_beyond_bars"] == 2
        assert row["difference"] == pytest.approx(row["second"] - row["first"])
        assert "without error bars" in row["text"]

    def test_the_same_study(self, ran):
        found = compare_studies(ran.with_suffix(".toml"), ran.with_suffix(".toml"))
        assert not len(found.inputs)
        assert not len(found.changed)
        assert "the same within the error bars" in str(found)


class TestDrawing:
    def test_section(self, tmp_path):
        """Widths in the drawing are those of the cell, and the fingers lie in the middle of the period."""
        finger = fc.Strip("finger", width_um=60, contact=fc.Contact("front", 2), layer=fc.DopedLayer("n", 90))
        cell = fc.UnitCell(simple().base, 1000, front=fc.Face(fc.Surface(J0_fA_per_cm2=8), [finger]))
        parts = cell_parts(cell)
        assert [p.text for p in parts] == [
            "front: J0 8 fA/cm²", "front.finger: width 60 µm, n-layer 90 Ω/sq, J0 8 fA/cm², contact 'front' 2 mΩ cm²",
            "rear: no recombination",
        ]  # fmt: skip
        assert parts[1].shape.bounds[0::2] == (-30, 30)
        figure = draw_cell(cell, tmp_path / "cell.png")
        shown = [p.get_width() for p in figure.axes[0].patches if hasattr(p, "get_width")]
        assert shown[0] == 1000
        assert shown.count(60) == 2  # layer and metal

    def test_plan_and_wide_cell(self, tmp_path):
        dot = fc.Dot("dot", diameter_um=90, contact=fc.Contact("front"))
        flat = fc.UnitCell(simple().base, 300, 300, front=fc.Face(fc.Surface(J0_fA_per_cm2=8), [dot]))
        figure = draw_cell(flat, Path(tmp_path) / "plan.png")
        assert [ax.get_title(loc="left").split(",")[0] for ax in figure.axes] == ["front", "rear"]
        wide = draw_cell(fc.UnitCell(simple().base, 9000))
        assert any("stretched" in t.get_text() for t in wide.axes[0].texts)
