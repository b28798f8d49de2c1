"""Settings: what is accepted, what is refused and in which words, and the file that `start` writes."""

import json
import os
import re
from pathlib import Path

import numpy as np
import pydantic
import pytest
from hypothesis import HealthCheck, example, given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

from fluvinv.errors import SettingsError
from fluvinv.files.first_settings import first_settings_text
from fluvinv.files.settings import Settings, settings_record
from fluvinv.files.settings_file import read_settings
from fluvinv.files.settings_keys import all_keys, section_of

LEAST = "catchment: {dem: heights.tif}\nstream_power: {erodibility: 4e-07}\n"
ERODIBILITY = {"stream_power.erodibility": (4e-7, "relief over extent")}

many = hypothesis_settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


@pytest.fixture
def load(tmp_path):
    def load(content, name="isle.yml"):
        path = tmp_path / name
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return read_settings(path)

    return load


@pytest.fixture
def refusal(load):
    def refusal(content):
        with pytest.raises(SettingsError) as caught:
            load(content)
        message = str(caught.value)
        assert message.startswith("isle.yml")
        assert len(message.splitlines()) <= 3
        assert "pydantic" not in message
        assert "http" not in message
        return message

    return refusal


def test_promised_defaults(load, tmp_path):
    s = load(LEAST)
    assert s.catchment.name == "isle"
    assert s.catchment.dem == tmp_path / "heights.tif"
    assert s.results_directory == Path("isle_uplift")
    assert settings_record(s) == {
        "catchment": {
            "name": "isle",
            "dem": "heights.tif",
            "base_level_m": 0.0,
            "nodata": "auto",
            "projection": "auto",
            "base_level_polygon": None,
            "flow_directions": None,
        },
        "terrain": {
            "engine": "pyflwdir",
            "depressions": "carve",
            "channel_area_km2": "auto",
            "incomplete": "drop",
        },
        "stream_power": {
            "erodibility": 4e-7,
            "reference_celerity_m_per_yr": None,
            "reference_area_km2": 100.0,
            "area_exponent": 0.5,
            "slope_exponent": 1.0,
            "erodibility_map": None,
            "rainfall_map": None,
            "base_level_history": None,
        },
        "uplift_grid": {"spacing_km": "auto", "step_myr": "auto", "duration_myr": "auto"},
        "inversion": {
            "noise": "white",
            "damping": {
                "choose": "l-curve",
                "range_km": "auto",
                "range_myr": "auto",
                "spread_mm_per_yr": "auto",
            },
            "rock": {"spread": 0.0, "range_km": "auto"},
            "allow_subsidence": True,
            "seed": 1,
        },
        "markers": None,
        "regions": None,
        "sweep": None,
        "output": {"directory": None, "report": False, "compare_with": None},
    }


def test_given_values_arrive(load, tmp_path):
    s = load(
        "catchment: {name: Vell, dem: ../dems/vell.tif, base_level_m: -3, nodata: sea, projection: EPSG:32633}\n"
        "terrain: {depressions: fill, channel_area_km2: 2.5, incomplete: keep}\n"
        "stream_power: {reference_celerity_m_per_yr: 0.01, area_exponent: 0.4, slope_exponent: 1}\n"
        "uplift_grid: {spacing_km: 8, step_myr: 0.5, duration_myr: 12}\n"
        "inversion:\n"
        "  noise: {height_m: 12, walk_m_per_sqrt_km: 0}\n"
        "  damping: {choose: fixed, range_km: 40, range_myr: 3, spread_mm_per_yr: 0.2}\n"
        "  rock: {spread: 0, range_km: auto}\n"
        "  allow_subsidence: false\n"
        "  seed: 7\n"
        "markers:\n"
        "output: {directory: out/vell, compare_with: /known/truth.tif}\n"
    )
    record = settings_record(s)
    assert s.catchment.dem == tmp_path / "../dems/vell.tif"
    assert s.output.compare_with == Path("/known/truth.tif")
    assert record["catchment"]["dem"] == "../dems/vell.tif"
    assert settings_record(s, tmp_path.parent)["catchment"]["dem"] == "dems/vell.tif"
    assert s.results_directory == Path("out/vell")
    assert (s.catchment.name, s.catchment.base_level_m, s.catchment.nodata) == ("Vell", -3, "sea")
    assert (s.terrain.depressions, s.terrain.channel_area_km2, s.terrain.incomplete) == ("fill", 2.5, "keep")
    assert list(record["uplift_grid"].values()) == [8, 0.5, 12]
    assert s.inversion.noise.height_m == record["inversion"]["noise"]["height_m"] == 12
    assert list(record["inversion"]["damping"].values()) == ["fixed", 40, 3, 0.2]
    assert (s.inversion.allow_subsidence, s.inversion.seed) == (False, 7)
    assert json.loads(json.dumps(record)) == record
    with pytest.raises(pydantic.ValidationError):
        s.inversion.seed = 8


@pytest.mark.parametrize(
    ("text", "erodibility"),
    [
        ("erodibility: 4e-07", 4e-7),
        # c = K A^m (Rosenbloom & Anderson 1994; check value 1.6, memory), A = 1e8 m2
        ("reference_celerity_m_per_yr: 0.01", 1e-6),
        ("{reference_celerity_m_per_yr: 0.01, area_exponent: 0.4}", 10**-5.2),
        ("{reference_celerity_m_per_yr: 0.02, reference_area_km2: 1, area_exponent: 0.25}", 0.02 / 10**1.5),
    ],
)
def test_erodibility_from_a_celerity(load, text, erodibility):
    text = text if text.startswith("{") else f"{{{text}}}"
    s = load(f"catchment: {{dem: a.tif}}\nstream_power: {text}\n")
    assert s.stream_power.erodibility_si == pytest.approx(erodibility, rel=1e-14)


@pytest.mark.parametrize(
    ("word", "value"),
    # forms of YAML 1.2.2, section 10.3.2 (memory); "010" is ten there, not eight
    [
        ("0o7", 7),
        ("0x3A", 58),
        ("-19", -19),
        ("0.", 0),
        (".5", 0.5),
        ("+12e02", 1200),
        ("-2E+03", -2000),
        ("010", 10),
        ("4e-07", 4e-7),
    ],
)
def test_numbers_of_yaml_1_2(load, word, value):
    s = load(f"catchment: {{dem: a.tif, base_level_m: {word}}}\nstream_power: {{erodibility: 1e-6}}\n")
    assert s.catchment.base_level_m == value


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            "uplift_grid:\n  spacing_km: ten",
            "line 4: uplift_grid.spacing_km: found 'ten', expected 'auto' or a number from 0.001 to 10000 (km).",
        ),
        ("uplift_grid: {spacing_km: 0}", "found 0, expected 'auto' or a number from 0.001 to 10000 (km)."),
        ("uplift_grid: {step_myr: .nan}", "uplift_grid.step_myr: found nan, expected 'auto' or a number"),
        ("uplift_grid: {step_myr: .inf}", "uplift_grid.step_myr: found inf, expected"),
        ("uplift_grid: {step_myr: 1e999}", "uplift_grid.step_myr: found inf, expected"),
        ("uplift_grid: {step_myr: true}", "found true, expected 'auto' or a number from 1e-06 to 5000 (Myr)."),
        ("uplift_grid: {step_myr: }", "found nothing, expected 'auto' or a number from 1e-06 to 5000 (Myr)."),
        ("uplift_grid: {step_myr: '4e-07'}", "found '4e-07' (text; take the quotes away), expected"),
        ("uplift_grid: [1]", "uplift_grid: found a list, expected a mapping with keys out of spacing_km,"),
        ("uplift_grid: {spacin_km: 3}", "unknown key; did you mean uplift_grid.spacing_km?"),
        ("\nspacing_km: 3", "line 4: spacing_km: unknown key; did you mean uplift_grid.spacing_km?"),
        ("terrain: {smoothness: 3}", "terrain.smoothness: unknown key; known here: engine, depressions,"),
        (
            "terrain:\n  incomplete: drop\n  incomplete: keep",
            "line 5: terrain.incomplete: found twice, first in line 4;",
        ),
        ("terrain: {incomplete: maybe}", "found 'maybe', expected 'drop' or 'keep' or 'complete'."),
        ("terrain: {engine: other}", "found 'other', expected 'pyflwdir'."),
        ("inversion: {allow_subsidence: no}", "found 'no', expected true or false."),
        ("inversion: {seed: 1.5}", "found 1.5, expected a whole number from 0 to 4294967295."),
        ("inversion: {seed: -1}", "found -1, expected a whole number"),
        ("inversion: {noise: {height_m: 0}}", "noise.height_m: found 0, expected a number from 0.001 to 10000 (m)."),
        ("inversion: {noise: {}}", "inversion.noise: found no height_m, expected 'white' or a mapping such as"),
        ("inversion: {noise: grey}", "inversion.noise: found 'grey', expected 'white' or a mapping such as"),
        ("inversion: {noise: {heigth_m: 3}}", "unknown key; did you mean inversion.noise.height_m?"),
        ("inversion: {damping: {choose: fixed}}", "found 'auto' with 'choose: fixed', expected a number above 0"),
        ("inversion: {damping: {spread_mm_per_yr: 1}}", "found 1 with 'choose: l-curve', which finds this"),
        ("output: {directory: 3}", "found 3 (not text; put it in quotes), expected text."),
        ("output: {compare_with: ' '}", "output.compare_with: found ' ', expected text"),
        ("a: *x", "line 3: found an anchor or alias"),
        ("a: &x 1", "line 3: found an anchor or alias"),
        ("*x : 1", "line 3: found a key that is not plain text"),
        ("a: !!python/name:os.system x", "line 3: found a tag (!)"),
        ("---\na: 1", "line 3: found a second document (---)"),
        ("a:\n\tb: 1", "line 4: found a tab, expected spaces"),
        ("a: 'x\n\n", "line 3: a quote or bracket is opened here and never closed."),
        ("a: [1, 2\n\n", "line 3: a quote or bracket is opened here and never closed."),
        ("a: b: c", "line 3: found a second colon or a wrong indentation"),
        ("a: @x", "line 3: not valid YAML"),
        ("a: \x07", "line 3: found a control character"),
        ("? [1]\n: 2", "line 3: found a key that is not plain text"),
        ("a: " + "[" * 200_000, "line 3: found more than 20 levels"),
    ],
)
def test_refusals(refusal, text, message):
    assert message in refusal(LEAST + text + "\n")


@pytest.mark.parametrize("value", ["-4e-7", "0", "2", "1e-13", ".inf", "true", "[1]", "'4e-07'"])
def test_absurd_erodibility(refusal, value):
    message = refusal(f"catchment: {{dem: a.tif}}\nstream_power:\n  erodibility: {value}\n")
    assert "isle.yml, line 3: stream_power.erodibility: found" in message
    assert "a number from 1e-12 to 1 (m^(1-2m)/yr; usually 1e-7 to 1e-4 at area exponent 0.5)." in message


@pytest.mark.parametrize("value", ["0", "1.5", "-0.5", "2"])
def test_area_exponent_lies_inside_an_open_interval(load, refusal, value):
    for inside in ("1e-9", "1.4999"):
        load(LEAST.replace("4e-07", f"4e-07, area_exponent: {inside}"))
    message = refusal(LEAST.replace("4e-07", f"4e-07, area_exponent: {value}"))
    assert f"found {value}, expected a number above 0 and below 1.5." in message


@pytest.mark.parametrize(
    ("text", "found"),
    [("", "neither"), ("erodibility: null", "neither"), ("erodibility: 1e-6, reference_celerity_m_per_yr: 1", "both")],
)
def test_one_of_erodibility_and_celerity(refusal, text, found):
    message = refusal(f"catchment: {{dem: a.tif}}\nstream_power: {{{text}}}\n")
    assert f"line 2: stream_power: found {found}, expected one of erodibility and reference" in message


@pytest.mark.parametrize(
    ("projection", "found"),
    [
        ("EPSG:4326", "not projected"),
        ("EPSG:2263", "in US survey foot"),
        ("EPSG:999999", "no known CRS"),
        ("nowhere", "no known CRS"),
        ("32633", "not text"),
    ],
)
def test_projection_must_be_projected_in_metres(refusal, projection, found):
    message = refusal(LEAST.replace("heights.tif", f"heights.tif, projection: {projection}"))
    assert "line 1: catchment.projection" in message
    assert found in message


@pytest.mark.parametrize(
    ("key", "text"),
    [
        ("markers", "markers: a.csv"),
        ("regions", "regions: a.gpkg"),
        ("sweep", "sweep: {vary: {stream_power.area_exponent: [0.4, 0.5]}}"),
        ("terrain.engine", "terrain: {engine: richdem}"),
        ("inversion.noise", "inversion: {noise: estimated}"),
        ("inversion.noise.walk_m_per_sqrt_km", "inversion: {noise: {height_m: 3, walk_m_per_sqrt_km: 2}}"),
        ("inversion.noise.walk_gain_sqrt_km", "inversion: {noise: {height_m: 3, walk_gain_sqrt_km: 2}}"),
        ("inversion.damping.choose", "inversion: {damping: {choose: evidence}}"),
        ("inversion.damping.choose", "inversion: {damping: {choose: held-out}}"),
        ("inversion.rock.spread", "inversion: {rock: {spread: estimated}}"),
        ("inversion.rock.spread", "inversion: {rock: {spread: 0.2}}"),
        ("inversion.rock.range_km", "inversion: {rock: {range_km: 10}}"),
        ("output.report", "output: {report: true}"),
    ],
)
def test_later_work_is_refused_by_name(refusal, key, text):
    message = refusal(LEAST + text)
    assert message.startswith(f"isle.yml, line 3: {key}: ")
    assert "not done yet in this version" in message


@pytest.mark.parametrize(
    "text",
    ["slope_exponent: 1.2", "erodibility_map: a.tif", "rainfall_map: a.tif", "base_level_history: a.csv"],
)
def test_later_stream_power_is_refused_by_name(refusal, text):
    message = refusal(LEAST.replace("4e-07", f"4e-07, {text}"))
    assert f"stream_power.{text.split(':')[0]}: " in message
    assert "not done yet in this version" in message


@pytest.mark.parametrize("key", ["base_level_polygon", "flow_directions"])
def test_later_catchment_is_refused_by_name(load, refusal, key):
    message = refusal(LEAST.replace("heights.tif", f"heights.tif, {key}: a.tif"))
    assert f"catchment.{key}: this key is not done yet in this version" in message
    load(LEAST.replace("heights.tif", f"heights.tif, {key}: null"))


def test_first_in_file_order_and_how_many_more(refusal):
    message = refusal(
        "output: {report: 3}\ncatchment: {dem: a.tif, dme: 2}\nstream_power: {erodibilty: 4e-07}\noutput: {}\n"
    )
    assert message == ("isle.yml, line 1: output.report: found 3, expected false.\n3 more findings after this one.")
    message = refusal("stream_power: {erodibility: 4e-7}\ninversion: {seed: a, allow_subsidence: 1}")
    assert message.startswith("isle.yml, line 2: inversion.seed: found 'a'")
    assert message.endswith("\n2 more findings after this one.")


@pytest.mark.parametrize("text", ["stream_power: {erodibility: 4e-7}", "catchment:\nstream_power: {erodibility: 1e-6}"])
def test_missing_key(refusal, text):
    assert refusal(text) == "isle.yml: catchment.dem is missing, expected the path of a file."


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (LEAST.encode("utf-16"), "isle.yml: found UTF-16 text or binary data, expected UTF-8."),
        (LEAST.encode("utf-16-le"), "isle.yml: found UTF-16 text or binary data, expected UTF-8."),
        (LEAST.encode() + b"# caf\xe9", "isle.yml, line 3: found a byte that is not UTF-8, expected UTF-8."),
        (b"", "isle.yml: the file is empty."),
        (b" \n\n", "isle.yml: the file is empty."),
        (b"\xef\xbb\xbf\n", "isle.yml: the file is empty."),
        (b"# nothing\n", "isle.yml: the file holds comments only."),
        (b"- 1\n", "isle.yml: found a list, expected a mapping"),
        (b"hello", "isle.yml: found 'hello', expected a mapping"),
        (b"%YAML 1.1\n---\na: 1", "isle.yml, line 2: found a %YAML line, expected YAML 1.2"),
        (b"# so\n%YAML 1.3\n---\na: 1", "isle.yml, line 2: found a %YAML line, expected YAML 1.2"),
        (b"#" * 1_000_001, "isle.yml: more than 1 MB"),
    ],
)
def test_files_that_are_no_settings(refusal, content, message):
    assert message in refusal(content)


def test_byte_order_mark_and_windows_line_ends_are_accepted(load):
    assert load(b"\xef\xbb\xbf" + LEAST.encode()) == load(LEAST.replace("\n", "\r\n")) == load(LEAST)


def test_missing_file_and_folder(tmp_path):
    with pytest.raises(SettingsError, match=r"none\.yml: no such settings file"):
        read_settings(tmp_path / "none.yml")
    with pytest.raises(SettingsError, match="found a folder, expected a settings file"):
        read_settings(tmp_path)
    with pytest.raises(SettingsError, match="cannot be read"):
        read_settings("a\0b.yml")


def test_name_from_an_odd_file_name(load):
    assert load(LEAST, "odd\\na\nme.v2.yml").catchment.name == "odd_na_me.v2"


def test_paths_are_relative_to_the_settings_file(load, tmp_path, monkeypatch):
    load(LEAST)
    monkeypatch.chdir(tmp_path.parent)
    relative = read_settings(Path(tmp_path.name) / "isle.yml")
    assert relative.catchment.dem == tmp_path / "heights.tif"


@pytest.mark.parametrize(
    ("value", "found"), [('"a\\0b"', r"'a\\x00b'"), ('"\\ud800"', r"'\\ud800'"), ("7", "7"), ("''", "''")]
)
def test_dem_names_that_no_file_can_have(refusal, value, found):
    message = refusal(f"catchment: {{dem: {value}}}\nstream_power: {{erodibility: 1e-6}}")
    assert re.search(f"line 1: catchment.dem: found {found}[ ,]", message)


@many
@given(st.one_of(st.binary(), st.text().map(lambda t: t.encode(errors="replace"))))
@example(b"%YAML 1." + b"9" * 5000 + b"\n---\na: 1")
@example(b"a: " + b"9" * 5000)
@example(b"\xef\xbb\xbf")
def test_any_bytes_load_or_are_refused(tmp_path, content):
    path = tmp_path / "any.yml"
    path.write_bytes(content)
    with pytest.raises(SettingsError, match=r"any\.yml"):  # nobody names a DEM and an erodibility by chance
        read_settings(path)


json_like = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=5) | st.sampled_from(["auto", "white"]),
    lambda inner: st.lists(inner, max_size=2) | st.dictionaries(st.text(max_size=5), inner, max_size=2),
    max_leaves=4,
)


@many
@given(st.sampled_from([path for path, _ in all_keys(Settings)]), json_like)
def test_any_value_of_any_key_loads_or_is_refused(tmp_path, path, value):
    tree = {"catchment": {"dem": "a.tif"}, "stream_power": {"erodibility": 1e-6}}
    at = tree
    for name in path[:-1]:
        at = at.setdefault(name, {})
    at[path[-1]] = value
    file = tmp_path / "any.yml"
    file.write_text(json.dumps(tree))  # JSON is YAML 1.2; NaN and Infinity of Python read as text
    try:
        record = settings_record(read_settings(file))
    except SettingsError as error:
        assert len(str(error).splitlines()) <= 3  # noqa: PT017 (either outcome is right)
    else:
        json.dumps(record, allow_nan=False)


def test_first_settings_explain_every_key_and_load(load, tmp_path):
    guesses = ERODIBILITY | {
        "uplift_grid.spacing_km": (np.float64(12.5), "a tenth\nof the extent."),
        "terrain.incomplete": ("keep", "no sea was found"),
        "output.compare_with": ("truth.tif", "it lies there"),
        "catchment.base_level_m": (np.int64(-2), "lowest cell at the edge"),
    }
    text = first_settings_text("heights.tif", "Vell", guesses)
    lines = text.splitlines()
    for path, field in all_keys(Settings):
        if section_of(field) and path[-1] != "noise":
            continue
        if path[:2] == ("inversion", "noise") and len(path) == 3:
            continue
        about = [i for i, line in enumerate(lines) if "# " in line and field.description[1:] in line]
        assert len(about) == 1, path
        pair = "\n".join(lines[about[0] : about[0] + 2])
        assert f" {path[-1]}:" in pair
        assert (field.json_schema_extra or {}).get("unit", "") in pair
    assert "# Distance between map nodes (km). Guess: a tenth of the extent.\n  spacing_km: 12.5\n" in text
    s = load(text)
    assert s.catchment.name == "Vell"
    assert s.uplift_grid.spacing_km == 12.5
    assert s.terrain.incomplete == "keep"
    assert s.catchment.base_level_m == -2
    assert s.output.compare_with == tmp_path / "truth.tif"
    with pytest.raises(KeyError, match="no_such"):
        first_settings_text("a.tif", "a", ERODIBILITY | {"terrain.no_such": (1, "")})


def test_first_settings_of_guesses_only_where_given_equal_the_defaults(load):
    # the written file states the defaults; it must not differ from leaving the keys out
    assert load(first_settings_text("heights.tif", "isle", ERODIBILITY)) == load(LEAST)


file_names = st.text(st.characters(exclude_characters="\0", exclude_categories=["Cs"]), min_size=1).filter(
    lambda text: text.strip()
)


@many
@given(file_names, st.text(), st.text())
@example("we\"ird: #na'me\n\té😀\udc80\u2028\x85\ufeff.tif", "a/b\\c", "so\n# so: 1\x07\udc80")
@example("null", "TRUE", "")
@example("-", "~", "")
@example("4e-07", "on", "")
def test_first_settings_survive_any_name(tmp_path, dem, name, reason):
    text = first_settings_text(dem, name, {"stream_power.erodibility": (4e-7, reason)})
    path = tmp_path / "first.yml"
    path.write_text(text, encoding="utf-8")
    s = read_settings(path)
    assert os.fspath(s.catchment.dem) == os.fspath(tmp_path / dem)
    assert settings_record(s)["catchment"]["dem"] == dem
    assert s.stream_power.erodibility == 4e-7
