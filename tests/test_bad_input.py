"""Whatever is wrong with the input: one short message, the right exit code, and nothing left behind."""

import json
import signal
import subprocess
import sys
import warnings
from pathlib import Path

import numpy as np
import pytest
from affine import Affine

from fluvinv import beginning, cli, pipeline
from fluvinv.errors import OutputError
from fluvinv.files import publish

SETTINGS, DATA, OUTPUT = 2, 3, 5
STEPS = ("reading", "drainage", "rows", "decomposition", "damping", "errors", "figures", "writing", "done")
GOOD = {
    "catchment": {"dem": "dem.tif"},
    "terrain": {"channel_area_km2": 10},
    "stream_power": {"erodibility": 1e-6},
    "uplift_grid": {"spacing_km": 8, "step_myr": 1},
}


def settings_text(**changes):
    """One section a line, in the order of GOOD; JSON is YAML 1.2."""
    return "".join(f"{name}: {json.dumps(part)}\n" for name, part in (GOOD | changes).items())


class Bench:
    """A working folder, a command line and what it said."""

    def __init__(self, folder, capsys):
        self.folder, self.capsys = folder, capsys

    def settings(self, text=None, **changes):
        content = settings_text(**changes) if text is None else text
        (self.folder / "isle.yml").write_bytes(content if isinstance(content, bytes) else content.encode())

    def held(self):
        return sorted(str(path.relative_to(self.folder)) for path in self.folder.rglob("*"))

    def run(self, *arguments):
        code = cli.main([str(argument) for argument in arguments])
        out, err = self.capsys.readouterr()
        return code, out, err

    def refused(self, code, *arguments):
        """The message of a command that must fail with this code and leave the folder as it was."""
        before = self.held()
        found, out, err = self.run(*arguments)
        assert found == code, err
        assert out == ""
        assert self.held() == before
        assert err.startswith("fluvinv: ")
        assert err.count("fluvinv: ") == 1
        assert len(err) < 700
        assert len(err.splitlines()) <= 2
        assert "Traceback" not in err
        return err.removeprefix("fluvinv: ").strip()

    def refused_by_all(self, code, verbs=("check", "network", "run")):
        messages = {self.refused(code, verb, "isle.yml", "--output", "results") for verb in verbs}
        assert len(messages) == 1
        return messages.pop()


@pytest.fixture
def bench(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    # As under python -W error: no warning of a library may arise, and if one does it is a failure here.
    monkeypatch.setattr(sys, "warnoptions", ["error"])
    bench = Bench(tmp_path, capsys)
    bench.settings()
    return bench


@pytest.fixture
def isle(bench, islet, write_raster):
    write_raster(bench.folder / "dem.tif", islet)
    return bench


def test_a_sound_run_then_every_reason_not_to_write(isle):
    assert isle.run("run", "isle.yml", "--output", "new/results")[0] == 0
    assert json.loads((isle.folder / "new/results/run.json").read_text())["stage"] == "run"
    before = {path: path.read_bytes() for path in isle.folder.rglob("*") if path.is_file()}
    # the same job: nothing to do, and it says so
    for verb in ("run", "network", "check"):
        code, out, err = isle.run(verb, "isle.yml", "--output", "new/results")
        assert (code, err) == (0, "")
        assert "already holds" in out
    # another job
    isle.settings(stream_power={"erodibility": 2e-6})
    before[isle.folder / "isle.yml"] = (isle.folder / "isle.yml").read_bytes()
    for verb in ("run", "network", "check"):
        assert "--overwrite" in isle.refused(OUTPUT, verb, "isle.yml", "--output", "new/results")
    # a folder that is not ours is not replaced, --overwrite or not
    (isle.folder / "mine").mkdir()
    (isle.folder / "mine/letter.txt").write_text("dear")
    assert "no results of fluvinv" in isle.refused(OUTPUT, "run", "isle.yml", "--output", "mine", "--overwrite")
    assert "holds the input isle.yml" in isle.refused(OUTPUT, "run", "isle.yml", "--output", ".", "--overwrite")
    assert "a file stands where" in isle.refused(OUTPUT, "run", "isle.yml", "--output", "dem.tif", "--overwrite")
    assert all(path.read_bytes() == content for path, content in before.items())
    # told to overwrite through a link: the link stays
    (isle.folder / "link").symlink_to("new/results")
    assert isle.run("network", "isle.yml", "--output", "link", "--overwrite", "-q") == (0, "", "")
    assert (isle.folder / "link").is_symlink()
    assert json.loads((isle.folder / "new/results/run.json").read_text())["settings"]["stream_power"] != GOOD
    assert [path.name for path in (isle.folder / "new").iterdir()] == ["results"]


@pytest.mark.parametrize(
    ("folder", "found"),
    [("dem.tif/below", "is a file"), ("/proc/results", "cannot be written"), ("x" * 300, "File name too long")],
)
def test_output_that_cannot_be_written(isle, folder, found):
    for verb in ("network", "run"):
        assert found in isle.refused(OUTPUT, verb, "isle.yml", "--output", folder)
    assert found in isle.refused(OUTPUT, "start", "dem.tif", "--output", folder)


def test_start_replaces_nothing_unasked_and_never_its_input(isle):
    assert isle.run("start", "dem.tif", "-q") == (0, "", "")
    assert "exists already" in isle.refused(OUTPUT, "start", "dem.tif")
    assert isle.run("start", "dem.tif", "--overwrite")[0] == 0
    (isle.folder / "dem.tif").rename("heights.yml")
    assert "would replace the input" in isle.refused(OUTPUT, "start", "heights.yml", "--overwrite")


@pytest.mark.parametrize(
    ("arguments", "found"),
    [
        ([], "Missing command"),
        (["raise"], "No such command 'raise'"),
        (["run"], "SETTINGS"),
        (["run", "isle.yml", "more"], "unexpected extra argument"),
        (["run", "isle.yml", "--fast"], "--fast"),
        (["check", "isle.yml", "--output"], "requires an argument"),
        (["run", "none.yml"], "none.yml: no such settings file"),
        (["run", "."], "found a folder"),
    ],
)
def test_usage(isle, arguments, found):
    assert found in isle.refused(SETTINGS, *arguments)


def _cut(write, path, islet, **profile):
    write(path, islet, **profile)
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])


UNREADABLE = {
    "missing": (lambda _write, _path, _islet: None, "no such file"),
    "folder": (lambda _write, path, _islet: path.mkdir(), "a folder"),
    "no raster": (lambda _write, path, _islet: path.write_text("heights"), "cannot be read as a raster"),
    "empty": (lambda _write, path, _islet: path.touch(), "cannot be read as a raster"),
    "cut": (_cut, "damaged"),
    "cut and packed": (lambda write, path, islet: _cut(write, path, islet, compress="deflate"), "damaged"),
}


@pytest.mark.parametrize("case", UNREADABLE)
def test_a_dem_that_cannot_be_read(bench, islet, write_raster, case):
    make, found = UNREADABLE[case]
    make(write_raster, bench.folder / "dem.tif", islet)
    message = bench.refused(DATA, "start", "dem.tif")
    assert message.startswith("dem.tif: ")
    assert found in message
    assert f"{bench.folder / 'dem.tif'}: " in bench.refused_by_all(DATA)


NORTH_UP = Affine(1000, 0, 500_000, 0, -1000, 4_000_000)
UNFIT = {
    "no CRS": (lambda z: z, {"crs": None}, "no coordinate reference system"),
    "two bands": (lambda z: np.stack([z, z]), {}, "has 2 bands"),
    "all void": (lambda z: z * 0 - 9999, {"nodata": -9999}, "all 1024 cells are void"),
    "all NaN": (lambda z: z * np.nan, {}, "all 1024 cells are void"),
    "all sea": (lambda z: z * 0 - 5, {}, "none of its 1024 cells with a value lies above base level"),
    "rotated": (lambda z: z, {"transform": NORTH_UP * Affine.rotation(9)}, "rotated"),
    "infinite": (lambda z: np.where(z > 500, np.inf, z).astype("f4"), {}, "infinite heights"),
    "complex": (lambda z: z.astype("c8"), {}, "complex"),
    "not metres": (lambda z: z * 100, {}, "outside the -12,000 to 9,000 m"),
    "fill value": (lambda z: np.where(z < 0, -9999, z).astype("f4"), {}, "hold exactly -9999"),
    "largest fill value": (lambda z: np.where(z < 0, -3.4e38, z).astype("f4"), {}, "outside the"),
    "double": (lambda z: np.where(z < 0, -1e300, z.astype("f8")), {}, "outside the"),
    "one cell": (lambda z: z[:1, :1], {}, "at least 2 by 2"),
    "one row": (lambda z: z[16:17], {}, "at least 2 by 2"),
    "one column": (lambda z: z[:, 16:17], {}, "at least 2 by 2"),
    "no latitudes": (lambda z: z, {"crs": "EPSG:4326"}, "no latitudes"),
    "on the pole": (lambda z: z, {"crs": 4326, "transform": Affine(0.5, 0, 0, 0, -0.5, 90.25)}, "no latitudes"),
    "geocentric": (lambda z: z, {"crs": "EPSG:4978"}, "neither geographic nor projected"),
    "local CRS": (lambda z: z, {"crs": 'LOCAL_CS["site",UNIT["metre",1]]'}, "neither geographic nor projected"),
}


@pytest.mark.parametrize("case", UNFIT)
def test_a_dem_that_is_not_fit(bench, islet, write_raster, case):
    change, profile, found = UNFIT[case]
    write_raster(bench.folder / "dem.tif", change(islet), **profile)
    message = bench.refused(DATA, "start", "dem.tif")
    assert message.startswith("dem.tif: ")
    assert found in message
    message = bench.refused_by_all(DATA)
    assert message.startswith((f"{bench.folder / 'dem.tif'}: ", "isle.yml, line 1: catchment.dem: "))
    assert found in message


def test_no_sea_under_drop_counts_and_names_the_line_to_change(bench, islet, write_raster):
    write_raster(bench.folder / "dem.tif", islet + 500)
    message = bench.refused_by_all(DATA)
    assert "1024 land cells" in message
    assert "terrain.incomplete: keep" in message
    # `start` sees it too, and what it writes is accepted
    assert bench.run("start", "dem.tif")[0] == 0
    code, _, err = bench.run("check", "dem.yml")
    assert code == 0
    assert "100% of the river nodes" in err


def test_a_dem_too_small_for_rivers(bench, islet, write_raster):
    write_raster(bench.folder / "dem.tif", islet[15:18, 15:18])
    bench.settings(terrain={"incomplete": "keep"})
    assert "no basin is large enough for a river; the largest drains 6 km2" in bench.refused_by_all(DATA)


@pytest.mark.parametrize(
    ("section", "part", "found"),
    [
        ("terrain", {"channel_area_km2": 2000}, "line 2: terrain.channel_area_km2: 2000 km2 is above every basin"),
        ("terrain", {"chanel_area_km2": 20}, "line 2: terrain.chanel_area_km2: unknown key; did you mean terrain."),
        ("terrain", {"incomplete": 1}, "line 2: terrain.incomplete: found 1, expected 'drop'"),
        ("stream_power", {"erodibility": -1e-6}, "line 3: stream_power.erodibility: found -1e-06"),
        ("stream_power", {"erodibility": 1e6}, "line 3: stream_power.erodibility: found 1000000"),
        ("stream_power", {"erodibility": "1e-6"}, "(text; take the quotes away)"),
        ("stream_power", {"erodibility": 1e-6, "area_exponent": 1.5}, "area_exponent: found 1.5, expected a number"),
        ("stream_power", {"erodibility": 1e-6, "area_exponent": 0}, "area_exponent: found 0, expected a number"),
        ("uplift_grid", {"step_myr": 1e-300}, "line 4: uplift_grid.step_myr: found 1e-300"),
        ("uplift_grid", {"duration_myr": 1e300}, "line 4: uplift_grid.duration_myr: found 1e+300"),
        ("inversion", {"damping": {"range_km": 1e-300}}, "line 5: inversion.damping.range_km: found 1e-300"),
        ("inversion", {"noise": {"height_m": 1e-300}}, "line 5: inversion.noise.height_m: found 1e-300"),
        ("sweep", {"vary": {}}, "line 5: sweep: this key is not done yet in this version"),
    ],
)
def test_settings_that_no_run_could_use(isle, section, part, found):
    isle.settings(**{section: part})
    assert found in isle.refused_by_all(SETTINGS)


@pytest.mark.parametrize(
    ("section", "part", "found"),
    [
        ("uplift_grid", {"spacing_km": 0.5}, "line 4: uplift_grid.spacing_km: found 0.5 km, which is below the DEM's"),
        ("uplift_grid", {"spacing_km": 500}, "line 4: uplift_grid.spacing_km: found 500 km, which is more than the"),
        ("uplift_grid", {"step_myr": 1e-6}, "line 4: uplift_grid.step_myr: 1e-06 Myr makes"),
        ("uplift_grid", {"step_myr": 2, "duration_myr": 1}, "line 4: uplift_grid.step_myr: the age step of 2 Myr is"),
        ("stream_power", {"erodibility": 1e-12}, "line 3: stream_power.erodibility: with area exponent 0.5 it gives"),
        ("stream_power", {"erodibility": 1}, "Choose a smaller erodibility"),
        ("stream_power", {"reference_celerity_m_per_yr": 1e4}, "stream_power.reference_celerity_m_per_yr: with area"),
    ],
)
def test_settings_that_do_not_go_with_the_dem(isle, section, part, found):
    isle.settings(**{section: part})
    assert found in isle.refused_by_all(SETTINGS, verbs=("check", "run"))


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("catchment:\n\tdem: dem.tif\n", "isle.yml, line 2: found a tab"),
        (settings_text().encode("utf-16"), "isle.yml: found UTF-16"),
        (settings_text() + "terrain: {}\n", "isle.yml, line 5: terrain: found twice, first in line 2"),
        ("", "the file is empty"),
    ],
)
def test_files_that_are_no_settings(isle, text, found):
    isle.settings(text)
    assert found in isle.refused_by_all(SETTINGS)


def test_a_known_history_that_is_missing_or_none(isle):
    isle.settings(output={"compare_with": "none.tif"})
    assert "none.tif: no such file" in isle.refused_by_all(DATA)
    isle.settings(output={"compare_with": "dem.tif"})
    assert "needs a tag age_ma" in isle.refused_by_all(DATA)


def test_a_duration_below_the_longest_travel_time_warns_with_the_share(isle):
    isle.settings(uplift_grid={"spacing_km": 8, "step_myr": 0.5, "duration_myr": 0.5})
    code, out, err = isle.run("check", "isle.yml")
    assert code == 0
    assert "to 0.5 Ma" in out
    assert "is shorter than the longest travel time" in err
    assert "% of the river nodes reach back further" in err


IN_DEGREES = 1.2226  # km2, of a cell of 0.01 degrees at 6.6 north, where it is a square
FIT = {
    "south up": (lambda z: z[::-1], {"transform": Affine(1000, 0, 500_000, 0, 1000, 4_000_000 - 32_000)}, 1),
    "east first": (lambda z: z[:, ::-1], {"transform": Affine(-1000, 0, 532_000, 0, -1000, 4_000_000)}, 1),
    "whole numbers": (lambda z: np.where(z < 0, -32768, np.rint(z)).astype("i2"), {"nodata": -32768}, 1),
    "infinite nodata": (lambda z: np.where(z < 0, np.inf, z).astype("f4"), {"nodata": np.inf}, 1),
    "degrees": (lambda z: z, {"crs": 4326, "transform": Affine(0.01, 0, 10, 0, -0.01, 6.8)}, IN_DEGREES),
    "across 180": (lambda z: z, {"crs": 4326, "transform": Affine(0.01, 0, 179.9, 0, -0.01, 6.8)}, IN_DEGREES),
    "feet": (lambda z: z, {"crs": 2264, "transform": Affine(3280.83333, 0, 5e5, 0, -3280.83333, 4e6)}, 1),
    "with a vertical CRS": (lambda z: z, {"crs": "EPSG:32631+5773"}, 1),
}


@pytest.mark.parametrize("case", FIT)
def test_an_unusual_dem_that_is_fit_gives_the_same_rivers(bench, islet, write_raster, case):
    change, profile, cell_area = FIT[case]
    plain = islet.round() if case == "whole numbers" else islet
    longest = []
    for heights, how, area in ((plain, {}, 9.5), (change(plain), profile, 9.5 * cell_area)):
        write_raster(bench.folder / "dem.tif", heights, **how)
        bench.settings(
            catchment={"dem": "dem.tif", "nodata": "sea"}, terrain={"channel_area_km2": area, "depressions": "fill"}
        )
        assert bench.run("start", "dem.tif", "--overwrite")[0] == 0
        code, out, _ = bench.run("check", "isle.yml")
        assert code == 0
        longest.append(float(out.split("longest travel time is ")[1].split()[0]))
    # at area exponent 1/2 the travel time, length over root of area, is the same at any size of the cells
    assert longest[1] == pytest.approx(longest[0], rel=0.02)


def test_remarks_of_libraries_stay_off_the_terminal(isle, monkeypatch):
    monkeypatch.setattr(sys, "warnoptions", [])
    real = beginning.first_guesses
    monkeypatch.setattr(beginning, "first_guesses", lambda grid: warnings.warn("overflow", stacklevel=1) or real(grid))
    code, out, err = isle.run("start", "dem.tif")
    assert (code, err) == (0, "")
    assert "Guess" in out


def test_a_bug_says_so_and_shows_its_trace_only_with_v(isle, monkeypatch):
    monkeypatch.setattr(pipeline, "build_network", lambda *_args, **_more: 1 / 0)
    assert "a bug in the program (ZeroDivisionError" in isle.refused(1, "run", "isle.yml")
    code, out, err = isle.run("run", "isle.yml", "-v")
    assert (code, out) == (1, "")
    assert "Traceback" in err


@pytest.mark.parametrize("step", STEPS)
def test_an_interrupt_at_any_step_leaves_nothing(isle, monkeypatch, step):
    def stop(_job, name, _share):
        if name == ("" if step == "done" else step):
            raise KeyboardInterrupt

    before = isle.held()
    monkeypatch.setattr(pipeline.Job, "step", stop)
    code, out, err = isle.run("run", "isle.yml", "--output", "new/results")
    assert (code, out) == (130, "")
    assert "interrupted" in err
    assert isle.held() == before


@pytest.mark.parametrize("nth", [1, 2])
@pytest.mark.parametrize("trouble", [KeyboardInterrupt, OSError(28, "No space left on device")])
def test_old_results_come_back_when_the_exchange_is_stopped(tmp_path, monkeypatch, trouble, nth):
    folder = tmp_path / "results"
    folder.mkdir()
    (folder / "run.json").write_text("old")
    real, calls = Path.rename, []

    def rename(path, target):
        calls.append(path)
        if len(calls) == nth:
            raise trouble
        return real(path, target)

    monkeypatch.setattr(Path, "rename", rename)
    with pytest.raises(KeyboardInterrupt if trouble is KeyboardInterrupt else OutputError):  # noqa: SIM117
        with publish.results_folder(folder) as staging:
            (staging / "run.json").write_text("new")
    assert (folder / "run.json").read_text() == "old"
    assert [path.name for path in tmp_path.iterdir()] == ["results"]


def _started(folder, *arguments):
    command = [sys.executable, "-W", "error", "-c", "from fluvinv.cli import script; script()", *arguments, "-v"]
    return subprocess.Popen(command, cwd=folder, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


@pytest.mark.parametrize(
    ("verb", "step", "number"),
    [("run", step, (signal.SIGINT, signal.SIGTERM)[i % 2]) for i, step in enumerate(STEPS[:-1])]
    + [
        ("network", "drainage", signal.SIGTERM),
        ("network", "writing", signal.SIGINT),
        ("check", "reading", signal.SIGINT),
    ],
)
def test_a_signal_at_any_step_ends_with_130_and_leaves_nothing(isle, verb, step, number):
    before = isle.held()
    with _started(isle.folder, verb, "isle.yml", "--output", "new/results") as process:
        for line in process.stderr:
            if line.split()[-1] == step:
                break
        process.send_signal(number)
        out, err = process.communicate(timeout=60)
    assert process.returncode == 130, err
    assert out == ""
    assert err.splitlines()[-1].startswith("fluvinv: interrupted")
    assert "Traceback" not in err
    assert isle.held() == before
