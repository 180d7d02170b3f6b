"""The command line: output, exit codes, help in a moment."""

import csv
import io
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pandas as pd
import pytest
from test_study_file import GOOD
from test_study_store import STUDY
from typer.testing import CliRunner

import fem_carriers as fc
from fem_carriers.command import app
from fem_carriers.studies.study_run import read_results

SHORT = STUDY.replace("fields = true\n", "").replace('store = "results.sqlite"\n', "")


@pytest.fixture
def call(tmp_path, monkeypatch):
    """Call a command in a folder with a short study; its result with output and exit code."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "slab.toml").write_text(SHORT)
    (tmp_path / "pitch.toml").write_text(GOOD)

    def called(*words):
        result = CliRunner().invoke(app, words)
        if result.exception is not None and not isinstance(result.exception, SystemExit):
            raise result.exception
        return result

    return called


def program(*words, **options):
    return subprocess.run([sys.executable, "-m", "fem_carriers", *words], capture_output=True, text=True, **options)


def test_help_in_a_moment():
    """Best of five, against the time Python itself needs; without importing what computes or draws."""
    times, bare = [], []
    for _ in range(5):
        for command, found in ((["-m", "fem_carriers", "--help"], times), (["-c", "pass"], bare)):
            begun = time.perf_counter()
            subprocess.run([sys.executable, *command], check=True, capture_output=True)
            found.append(time.perf_counter() - begun)
    assert min(times) < 0.3 + 2 * min(bare)
    code = "import sys; from fem_carriers.command import app; print(*{m.split('.')[0] for m in sys.modules})"
    loaded = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout.split()
    assert not {"numpy", "scipy", "pandas", "skfem", "pyvista", "matplotlib", "rich", "xarray", "dask"} & set(loaded)


def test_help_names_the_commands_and_exit_codes(call):
    text = call("--help").stdout
    for word in ("check", "run", "show", "export", "view", "check-installation", "130 interrupted"):
        assert word in text


class TestCheck:
    def test_says_what_it_takes_and_runs_nothing(self, call):
        result = call("check", "pitch.toml", "--processes", "4")
        assert result.exit_code == 0
        said = dict(line.split(": ", 1) for line in result.stdout.splitlines())
        assert (said["points"], said["finished"]) == ("2", "0")
        assert "on 4 processes" in said["time"]
        assert float(said["memory"].split()[0]) > 100
        assert sorted(p.name for p in Path().iterdir()) == ["pitch.toml", "slab.toml"]

    def test_cells_that_will_be_refused(self, call):
        Path("pitch.toml").write_text(GOOD.replace("[900, 1200]", "[20, 900]"))
        result = call("check", "pitch.toml")
        assert result.exit_code == 0
        assert "cells refused: 1 of 2 tried" in result.stdout
        assert "point 0: UnitCell" in result.stdout

    def test_mistakes_go_to_the_error_stream(self, call):
        Path("pitch.toml").write_text(
            GOOD.replace("lifetime_us", "lifetme_us").replace("width_um = 28", "width_um = -1")
        )
        result = call("check", "pitch.toml")
        assert (result.exit_code, result.stdout) == (2, "")
        assert "line 11: unknown key base.lifetme_us = 400" in result.stderr
        assert "line 20" in result.stderr
        assert "Try: lifetime_us." in result.stderr
        assert call("check", "missing.toml").exit_code == 2


class TestRun:
    def test_runs_shows_exports_and_goes_on(self, call):
        result = call("run", "slab.toml", "--processes", "1")
        assert (result.exit_code, result.stdout) == (0, "")
        assert "slab.sqlite: 2 of 2 points, 0 without a result" in result.stderr
        assert Path("slab.csv").exists()
        shown = call("show", "slab.toml")
        assert shown.stderr == ""
        rows = list(csv.DictReader(io.StringIO(shown.stdout)))
        assert [float(row["base.thickness_um"]) for row in rows] == [50, 80]
        assert float(rows[0]["lost_x_min_mA_per_cm2"]) / float(rows[0]["generated_mA_per_cm2"]) == pytest.approx(0.75)
        assert call("show", "slab.sqlite").stdout == shown.stdout
        two = call("show", "slab.toml", "--columns", "unknowns, base.thickness_um", "--sort", "base.thickness_um")
        assert two.stdout.splitlines()[0] == "unknowns,base.thickness_um"
        assert two.stdout.splitlines()[1].endswith(",80.0")
        assert len(call("show", "slab.toml", "--rows", "1").stdout.splitlines()) == 2
        assert len(call("show", "slab.toml", "--failed").stdout.splitlines()) == 1
        assert call("show", "slab.toml", "--columns", "unknown").exit_code == 2
        assert call("export", "slab.toml", "again.csv").exit_code == 0
        pd.testing.assert_frame_equal(pd.read_csv("again.csv"), pd.read_csv("slab.csv"))
        assert call("export", "slab.toml", "again.xlsx").exit_code == 2
        quiet = call("run", "slab.toml", "-q")
        assert (quiet.exit_code, quiet.stdout, quiet.stderr) == (0, "", "")
        assert "finished: 2" in call("check", "slab.toml").stdout
        assert "measured on finished points" in call("check", "slab.toml").stdout

    def test_points_without_a_result(self, call):
        Path("slab.toml").write_text(SHORT.replace("[50, 80]", "[50, -1]"))
        result = call("run", "slab.toml", "--processes", "1")
        assert result.exit_code == 3
        assert "2 of 2 points, 1 without a result" in result.stderr
        assert "thickness_um = -1" in call("show", "slab.toml", "--failed").stdout

    def test_a_store_in_use_and_one_that_is_not_there(self, call):
        from fem_carriers.studies.store import open_store

        with open_store("slab.sqlite"):
            result = call("run", "slab.toml", "--processes", "1")
        assert result.exit_code == 4
        assert "in use" in result.stderr
        assert call("show", "pitch.toml").exit_code == 2
        assert call("run", "slab.toml", "--processes", "0").exit_code == 2

    @pytest.mark.skipif(os.name == "nt", reason="signals")
    @pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
    def test_interrupted(self, call, number):
        many = ", ".join(str(50 + i / 10) for i in range(2000))
        Path("slab.toml").write_text(SHORT.replace("[50, 80]", f"[{many}]"))
        process = subprocess.Popen(
            [sys.executable, "-m", "fem_carriers", "run", "slab.toml", "--processes", "1"],
            stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True,
            preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),
        )  # fmt: skip
        while process.poll() is None and rows() < 2:
            time.sleep(0.1)
        os.killpg(process.pid, number) if number == signal.SIGINT else process.send_signal(number)
        out, err = process.communicate(timeout=30)
        assert (process.returncode, out) == (130, ""), err
        assert f"interrupted: {rows()} of 2000 points are finished and kept" in err
        assert "Traceback" not in err


def rows():
    try:
        return len(read_results("slab.sqlite"))
    except fc.FemCarriersError:  # not made yet
        return 0


class TestView:
    @pytest.fixture
    def fields(self, call):
        Path("slab.toml").write_text(STUDY.replace("[50, 80]", "[50]"))
        assert call("run", "slab.toml", "--processes", "1").exit_code == 0
        return next(p for p in Path("results_fields").glob("*.vtu") if "surfaces" not in p.name)

    def test_field_file_and_point(self, call, fields):
        for words in ([str(fields)], ["slab.toml", "--point", "0"], ["results.sqlite", "--point", "0"]):
            result = call("view", *words, "--picture", "a.png")
            assert result.exit_code == 0, result.stderr
            assert "written: a.png" in result.stderr
            assert Path("a.png").stat().st_size > 5000
            Path("a.png").unlink()
        assert call("view", str(fields), "--field", "carrier_flux_mA_per_cm2", "--picture", "b.png").exit_code == 0
        shutil.rmtree("results_fields")
        Path("results.sqlite").unlink()
        result = call("view", "slab.toml", "--point", "0", "--picture", "c.png")  # computed again
        assert result.exit_code == 0, result.stderr
        assert "computing it" in result.stderr

    def test_refused(self, call, fields):
        assert call("view", "none.vtu").exit_code == 2
        assert call("view", "slab.toml").exit_code == 2
        assert "unknown" in call("view", str(fields), "--field", "unknown", "--picture", "a.png").stderr
        text = fields.read_bytes()
        fields.write_bytes(text[: len(text) // 2])
        result = call("view", str(fields), "--picture", "a.png")
        assert result.exit_code == 2
        assert "no sound field file" in result.stderr


def test_check_installation(call):
    result = call("check-installation")
    assert result.exit_code == 0, result.stdout
    words = {line.split()[1]: line.split()[0] for line in result.stdout.splitlines()}
    assert {words[name] for name in ("python", "numpy", "solution", "store", "processes", "picture")} == {"ok"}


def test_no_color_and_a_pipe(call):
    call("run", "slab.toml", "--processes", "1")
    for environment in ({"NO_COLOR": "1", "FORCE_COLOR": ""}, {"TERM": "dumb"}):
        shown = program("show", "slab.toml", env={**os.environ, **environment})
        assert "\x1b" not in shown.stdout + shown.stderr
        assert shown.stdout.startswith("base.thickness_um,")
    script = shutil.which("script")
    if script:  # a terminal
        command = f"{sys.executable} -m fem_carriers show slab.toml"
        plain = subprocess.run(
            [script, "-qec", command, "/dev/null"], capture_output=True, text=True, env={**os.environ, "NO_COLOR": "1"}
        )
        assert "thickness" in plain.stdout
        assert "\x1b[3" not in plain.stdout  # no colours; bold headings are none
