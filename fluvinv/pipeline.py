"""The jobs behind the verbs: the one place where settings, files and science meet."""

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pyproj
from matplotlib.figure import Figure

from fluvinv import __version__
from fluvinv.files import publish, rasters, record, tables, vectors
from fluvinv.files.cautions import CAUTIONS
from fluvinv.files.settings import Settings, settings_record
from fluvinv.files.settings_file import open_settings
from fluvinv.inversion import Comparison, Inversion, compare, history_at_nodes, invert
from fluvinv.layout import Layout, lay_out
from fluvinv.network import RiverNetwork
from fluvinv.report import drawing, figures, river_figures, summary
from fluvinv.streampower import chi, travel_time
from fluvinv.terrain import Grid, TerrainReport, build_network
from fluvinv.units import km2_to_m2, yr_to_myr

#: Called with a step's name and the share of the whole job that is done when it begins.
Progress = Callable[[str, float], None]


def _quiet(_step: str, _share: float) -> None:
    """Take no notice of progress."""


@dataclass
class Job:
    """What a verb works on, from the settings to the river network."""

    settings: Settings
    grid: Grid
    inputs: list[dict]
    fingerprint: str
    progress: Progress
    timings: dict[str, float] = field(default_factory=dict)
    warnings: list[str] = field(default_factory=list)

    def step(self, name: str, share: float) -> None:
        """Begin a step: tell the progress, note the time."""
        now = time.perf_counter()
        if self._running:
            self.timings[self._running] = round(self.timings.get(self._running, 0.0) + now - self._began, 3)
        self._running, self._began = name, now
        self.progress(name, share)

    _running: str = ""
    _began: float = 0.0


@dataclass(frozen=True)
class Rivers:
    """The terrain stage's result with the clock."""

    network: RiverNetwork
    terrain: TerrainReport
    tau: np.ndarray
    chi: np.ndarray


@dataclass(frozen=True)
class Outcome:
    """What a verb has to say when it is done."""

    folder: Path
    lines: list[str]
    warnings: list[str]


def target_folder(settings: Settings, output: Path | None) -> Path:
    """The results folder: `--output`, else `output.directory`, else NAME_uplift in the working folder."""
    return Path(output) if output is not None else settings.results_directory


@contextmanager
def open_job(settings_path: Path, progress: Progress = _quiet) -> Iterator[Job]:
    """Read settings and inputs; errors about a key tell its line as long as the job is open."""
    with open_settings(settings_path) as settings:
        yield _read_inputs(settings, progress)


def _read_inputs(settings: Settings, progress: Progress) -> Job:
    job = Job(settings, None, [], "", progress)
    job.step("reading", 0.0)
    job.grid = rasters.read_dem(settings.catchment.dem)
    written = settings_record(settings)
    paths = [(written["catchment"]["dem"], settings.catchment.dem)]
    if settings.output.compare_with is not None:
        rasters.read_history(settings.output.compare_with)
        paths.append((written["output"]["compare_with"], settings.output.compare_with))
    job.inputs = [{"path": str(name), "sha256": publish.sha256_of(path)} for name, path in paths]
    job.fingerprint = publish.fingerprint(written, job.inputs, __version__)
    return job


def _input_paths(settings_path: Path, settings: Settings) -> list[Path]:
    return [path for path in (settings_path, settings.catchment.dem, settings.output.compare_with) if path is not None]


def refuse_target(job: Job, settings_path: Path, folder: Path, overwrite: bool, stages: tuple[str, ...]) -> bool:
    """Refuse a results folder that must not be written; False where the wanted result stands there already."""
    if not overwrite and publish.already_done(folder, job.fingerprint, stages):
        return False
    publish.check_target(folder, _input_paths(settings_path, job.settings), job.fingerprint, overwrite)
    return True


def draw_rivers(job: Job) -> Rivers:
    """Run the terrain stage and the clock."""
    settings = job.settings
    job.step("drainage", 0.02)
    area = settings.terrain.channel_area_km2
    network, terrain = build_network(
        job.grid,
        base_level=settings.catchment.base_level_m,
        nodata=settings.catchment.nodata,
        depressions=settings.terrain.depressions,
        channel_area=area if area == "auto" else km2_to_m2(area),
        incomplete=settings.terrain.incomplete,
        projection=settings.catchment.projection,
    )
    job.warnings += terrain.warnings
    power = settings.stream_power
    tau = travel_time(network, power.erodibility_si, power.area_exponent)
    return Rivers(network, terrain, tau, chi(network, power.area_exponent / power.slope_exponent))


def _map_crs(rivers: Rivers) -> pyproj.CRS:
    return rivers.terrain.map_crs


def network(
    settings_path: Path, output: Path | None = None, overwrite: bool = False, progress: Progress = _quiet
) -> Outcome:
    """Run the terrain stage alone and publish what it found."""
    with open_job(settings_path, progress) as job:
        folder = target_folder(job.settings, output)
        if not refuse_target(job, settings_path, folder, overwrite, ("network", "run")):
            return Outcome(folder, [f"{folder} already holds the network of the same inputs and settings."], [])
        with publish.results_folder(folder) as staging:
            rivers = draw_rivers(job)
            job.step("writing", 0.8)
            _write_rivers(staging, rivers, job.grid.crs)
            tables.write_profiles(
                staging / "profiles.csv", tables.profiles_table(rivers.network, rivers.chi, rivers.tau)
            )
            _draw(staging, _river_figures(rivers))
            job.step("", 1.0)
            written = _record(job, "network", rivers)
            record.write_record(staging / publish.RECORD_NAME, written)
        return Outcome(folder, [*rivers_lines(job, rivers), *summary.entry("Results", [str(folder)])], job.warnings)


def run(
    settings_path: Path, output: Path | None = None, overwrite: bool = False, progress: Progress = _quiet
) -> Outcome:
    """Run the whole job and publish its results."""
    with open_job(settings_path, progress) as job:
        folder = target_folder(job.settings, output)
        if not refuse_target(job, settings_path, folder, overwrite, ("run",)):
            return Outcome(folder, [f"{folder} already holds the result of the same inputs and settings."], [])
        with publish.results_folder(folder) as staging:
            rivers = draw_rivers(job)
            layout = lay_out(job.settings, rivers.network, rivers.tau, job.grid)
            job.warnings += layout.warnings
            shares = {"rows": 0.1, "decomposition": 0.2, "damping": 0.6, "errors": 0.65}
            result = invert(
                rivers.network, rivers.tau, layout.grid, layout.options, lambda name: job.step(name, shares[name])
            )
            job.warnings += _doubts(result)
            job.step("figures", 0.8)
            lines = _publish_run(staging, job, rivers, layout, result)
        return Outcome(folder, [*lines, *summary.entry("Results", [str(folder)])], job.warnings)


def _doubts(result: Inversion) -> list[str]:
    """What in the inversion itself the reader must know."""
    found = []
    if result.curve is not None and not result.curve.clear:
        found.append(
            "inversion.damping: the L-curve has no clear corner, so the damping is a guess; state range and spread with"
            " choose: fixed."
        )
    lost = float(np.sqrt(np.mean((result.fitted - result.solved) ** 2)))
    if lost > 0.5 * result.damping.height_sd:
        found.append(
            "uplift_grid: the history that was fitted varies more between map nodes and ages than the published stack"
            f" can carry; heights made from the stack differ from the fit by {lost:.3g} m rms. Choose a smaller spacing"
            " and step, or more damping."
        )
    if result.reduced_chi_square > 2 and lost <= 0.5 * result.damping.height_sd:
        found.append(
            f"inversion.noise: the stated height error of {result.damping.height_sd:.3g} m is too small for the misfit"
            f" (reduced chi-square {result.reduced_chi_square:.3g}); the stated errors are too small with it."
        )
    return found


def _publish_run(staging: Path, job: Job, rivers: Rivers, layout: Layout, result: Inversion) -> list[str]:
    """Write every file of a run into the staging folder; return the summary."""
    fitted = result.fitted + rivers.network.base_level[rivers.network.basin_index]
    residual = rivers.network.height - fitted
    comparison = _compare(job, rivers, result)
    _draw_run(staging, rivers, result, fitted, comparison)
    job.step("writing", 0.95)
    _write_rivers(staging, rivers, job.grid.crs)
    tables.write_profiles(
        staging / "profiles.csv", tables.profiles_table(rivers.network, rivers.chi, rivers.tau, fitted)
    )
    tables.write_spectra(staging / "spectra.csv")
    _write_stacks(staging, result, _map_crs(rivers))
    job.step("", 1.0)
    choose = job.settings.inversion.damping.choose
    ranges = (layout.options.range_space, layout.options.range_time)
    written = _record(job, "run", rivers) | record.inversion_parts(result, residual, choose, ranges)
    written["verdict"] = summary.verdict(result)
    if comparison is not None:
        written["comparison"] = record.comparison_part(comparison, job.inputs[-1]["path"])
    record.write_record(staging / publish.RECORD_NAME, written)
    return [
        *rivers_lines(job, rivers),
        *summary.inversion_lines(result, written["fit"]["rms_m"], choose, ranges),
        *summary.entry("Found", written["verdict"]),
        *summary.entry("Errors", [summary.ON_INTERVALS[choose]]),
        *summary.entry("Cautions", list(CAUTIONS)),
        *(summary.comparison_line(comparison) if comparison is not None else []),
    ]


def rivers_lines(job: Job, rivers: Rivers) -> list[str]:
    """Say in the summary what was drawn and what sets the clock."""
    power, terrain = job.settings.stream_power, rivers.terrain
    chosen = job.settings.terrain.channel_area_km2 == "auto"
    return [
        *summary.entry("fluvinv", [f"{__version__}: {job.settings.catchment.name}"]),
        *summary.network_lines(rivers.network, terrain.channel_area, terrain.dropped, chosen),
        *summary.clock_lines(power.erodibility_si, power.area_exponent, rivers.tau.max()),
    ]


def _record(job: Job, stage: str, rivers: Rivers) -> dict:
    written = record.new_record(stage, job.fingerprint, settings_record(job.settings), job.inputs)
    written["network"] = record.network_part(rivers.network, rivers.terrain, _map_crs(rivers), rivers.tau)
    written["warnings"] = list(job.warnings)
    written["timings_s"] = dict(job.timings)
    return written


def _compare(job: Job, rivers: Rivers, result: Inversion) -> Comparison | None:
    """Compare with a known history, when the settings name one."""
    path = job.settings.output.compare_with
    if path is None:
        return None
    known = rasters.read_history(path)
    grid = result.grid
    to_known = pyproj.Transformer.from_crs(_map_crs(rivers), known.crs, always_xy=True)
    place_xy = np.column_stack(to_known.transform(*grid.place_xy.T))
    comparison = compare(result, history_at_nodes(known.x, known.y, known.ages, known.rate, place_xy, grid.ages))
    if comparison is None:
        job.warnings.append(f"{path.name}: the known history and the result do not overlap; nothing was compared.")
    return comparison


def _write_rivers(staging: Path, rivers: Rivers, crs: pyproj.CRS) -> None:
    vectors.write_network(staging / "network.gpkg", rivers.network, rivers.chi, crs)


def _write_stacks(staging: Path, result: Inversion, crs: pyproj.CRS) -> None:
    """Write the GeoTIFF stacks of the promise."""
    grid = result.grid
    per_mm = 1e3
    stacks = {
        "uplift_rate": (result.rate * per_mm, "uplift rate", "mm/yr"),
        "uplift_rate_sd": (result.rate_sd * per_mm, "standard deviation of the uplift rate", "mm/yr"),
        "uplift_rate_p025": (result.low * per_mm, "lower end of the 95 % interval of the uplift rate", "mm/yr"),
        "uplift_rate_p975": (result.high * per_mm, "upper end of the 95 % interval of the uplift rate", "mm/yr"),
        "sampled": (yr_to_myr(result.sampled), "time that all paths spend at the node", "Myr"),
        "cumulative_uplift": (result.cumulative, "uplift since this age", "m"),
        "cumulative_uplift_sd": (result.cumulative_sd, "standard deviation of the uplift since this age", "m"),
    }
    for name, (values, quantity, unit) in stacks.items():
        rasters.write_stack(staging / f"{name}.tif", grid.to_stack(values), grid, crs, quantity, unit)
    flags = grid.to_stack(result.resolved.astype(float))
    flags[np.isnan(flags)] = 255
    rasters.write_stack(staging / "resolved.tif", flags, grid, crs, "resolved (1) or not (0)", "", dtype="uint8")


def _river_figures(rivers: Rivers, fitted: np.ndarray | None = None) -> dict[str, Callable[[], Figure]]:
    """Figures that need no inversion, by name; each is drawn when it is called."""
    return {
        "network_map": lambda: river_figures.network_map(rivers.network),
        "profiles": lambda: river_figures.long_profiles(rivers.network, fitted),
        "height_against_chi": lambda: river_figures.height_against_chi(rivers.network, rivers.chi),
    }


def _draw_run(
    staging: Path, rivers: Rivers, result: Inversion, fitted: np.ndarray, comparison: Comparison | None
) -> None:
    net = rivers.network
    known = None if comparison is None else comparison.known
    drawn = _river_figures(rivers, fitted) | {
        "uplift_history": lambda: figures.uplift_history(result, net),
        "histories_at_places": lambda: figures.histories(result, net, known),
        "misfit_map": lambda: figures.misfit_map(net.height - fitted, net),
        "height_against_travel_time": lambda: river_figures.height_against_travel_time(net, rivers.tau, fitted),
    }
    if result.curve is not None:
        drawn["l_curve"] = lambda: figures.trade_off(result)
    _draw(staging, drawn)


def _draw(staging: Path, drawn: dict[str, Callable[[], Figure]]) -> None:
    """Draw and save figures in the house style."""
    folder = staging / "figures"
    folder.mkdir()
    with drawing.styled():
        for name, draw in drawn.items():
            drawing.save(draw(), folder / f"{name}.png")
