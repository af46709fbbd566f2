"""From a mission file to a folder of results."""

from __future__ import annotations

import shutil
import sys
import warnings
from pathlib import Path
from typing import TYPE_CHECKING, Any

from tqdm import tqdm

from envflux.cli.drawing import HISTORY, MEANS, Painter
from envflux.cli.folders import check_folder, check_names, results_folder
from envflux.errors import MISSING, EnvfluxWarning, InputError, Told

if TYPE_CHECKING:
    import xarray as xr

    from envflux.missions import Mission

_SUMMARY = "summary.txt"


def run_mission(file: str, out: str, *, replace: bool = False) -> None:
    """Compute every case of a mission file, write all files, and print the summary.

    Parameters
    ----------
    file : str
        The mission file.
    out : str
        Folder for the results.
    replace : bool
        Whether the results of an earlier run may be replaced.

    Raises
    ------
    InputError
        If the mission file or the folder cannot be used; nothing is written then.
    """
    folder = Path(out)
    if not Path(file).exists() or Path(file).is_dir():  # before the folder: it is the first thing to mend
        raise InputError(file, Told("a folder") if Path(file).is_dir() else MISSING, "a mission file that exists")
    check_folder(folder, replace=replace)
    # The pictures' process is started before anything else here is loaded: it has as much to load itself.
    with Painter() as artist:
        text, heard = _run(file, folder, artist, replace=replace)
    print(text)
    print(f"\nwritten to {folder}")
    for caution in heard:
        print(f"envflux: caution: {caution}", file=sys.stderr)


def _run(file: str, folder: Path, artist: Painter, *, replace: bool) -> tuple[str, tuple[str, ...]]:
    from envflux.missions import load_mission

    mission = load_mission(file)
    stems = {case: "--".join(case) for case in mission.cases}
    check_names(folder, [_SUMMARY, *(name for stem in stems.values() for name in _names(stem, mission))])
    with warnings.catch_warnings(record=True) as heard:
        warnings.simplefilter("always", EnvfluxWarning)
        with _progress(1 + len(stems) * (3 if mission.output.plots else 2)) as progress:
            try:
                text = _write_all(mission, folder, stems, artist, progress, heard, replace=replace)
            except InputError as error:
                if error.field == "--out":
                    raise
                # The complaint came from a computation, but what it is about stands in the file.
                raise InputError(f"{file}: {error.field}", error.value, error.accepted, verb=error.verb) from None
    return text, _heard(heard)


def _progress(steps: int) -> Any:
    """Show what is being done, on a terminal; stay silent in a pipe or a log."""
    # Some terminals say they are 0 by 0, which would hide the bar.
    columns, rows = shutil.get_terminal_size()
    return tqdm(
        total=steps,
        disable=not sys.stderr.isatty(),
        leave=False,
        file=sys.stderr,
        ncols=min(columns, 90),
        nrows=rows,
        bar_format="{desc:<30.30} |{bar}| {n_fmt}/{total_fmt}",
    )


def _write_all(
    mission: Mission,
    folder: Path,
    stems: dict[tuple[str, str], str],
    artist: Painter,
    progress: Any,
    heard: list[Any],
    *,
    replace: bool,
) -> str:
    from envflux.tables import SHORT_CAUTIONS, face_lines, save, write_table

    progress.set_description("track")
    track = mission.fly()
    progress.update()
    of_track = _heard(heard)
    of_cases: dict[str, list[str]] = {}
    lines = _heading(mission, track)
    with results_folder(folder, replace=replace) as fresh:
        try:
            for (mode, environment), stem in stems.items():
                progress.set_description(stem)
                before = len(heard)
                ds = mission.flux(mode, environment, track)
                own = tuple(text for text in _heard(heard[before:]) if text not in of_track)
                for text in own:
                    of_cases.setdefault(text, []).append(f"[{mode} / {environment}]")
                ds.attrs["title"] = f"{mission.mission.name}: {mode} mode, {environment} environment"
                progress.update()
                if mission.output.plots:
                    artist.order(ds, fresh, stem, mission.output.against)
                save(ds, fresh / f"{stem}.nc")
                write_table(ds, fresh / f"{stem}.csv", title=str(ds.attrs["title"]), cautions=of_track + own)
                progress.update()
                lines += ["", *_case_lines(mission, mode, environment, ds), *face_lines(ds)]
            cautions = [*of_track, *(_placed(text, where, len(stems)) for text, where in of_cases.items())]
            if cautions:  # what is particular to this run comes before what holds for every run
                lines += ["", *(f"caution: {caution}" for caution in cautions)]
            lines += ["", *(f"note: {caution}" for caution in SHORT_CAUTIONS)]
            text = "\n".join(lines)
            (fresh / _SUMMARY).write_text(text + "\n", encoding="utf-8")
            if mission.output.plots:
                progress.set_description("pictures")
                artist.finish(progress.update)
        except BaseException:
            artist.stop()  # before the folder goes in which it may be writing
            raise
    return text


def _names(stem: str, mission: Mission) -> list[str]:
    endings = [".nc", ".csv", ".json"]
    return [stem + ending for ending in endings + ([HISTORY, MEANS] if mission.output.plots else [])]


def _heading(mission: Mission, track: xr.Dataset) -> list[str]:
    from envflux.tables import orbit_lines

    lines = [mission.mission.name]
    if mission.mission.description:
        lines.append(mission.mission.description)
    time = track["time"].values
    when = f"from {str(time[0])[:19]}Z" if time.dtype.kind == "M" else "from orbit noon"
    revolutions = float(track["elapsed"][-1] - track["elapsed"][0]) / float(track["orbital_period"])
    plural = "" if abs(revolutions - 1) < 1e-6 else "s"
    orbit = f"{mission.orbit.kind} orbit, {revolutions:.4g} revolution{plural} {when}"
    return [*lines, "", orbit, *orbit_lines(track)]


def _case_lines(mission: Mission, mode: str, environment: str, ds: xr.Dataset) -> list[str]:
    how, around = mission.modes[mode], mission.environments[environment]
    bound = f"{how.bound} bound"
    if how.bound_absorptance or how.bound_emittance:
        bound = f"a {how.bound_absorptance or how.bound}, e {how.bound_emittance or how.bound}"
    said = [_said(name, value) for name, value in how.attitude if name in how.attitude.model_fields_set - _NOT_SAID]
    if how.attitude.kind == "spinning":
        said.append("followed in time" if "sun_azimuth" in ds else "averaged over the turn")
    attitude = f"{how.attitude.kind} attitude" + (f": {', '.join(said)}" if said else "")
    return [
        f"[{mode} / {environment}]  {attitude}",
        f"{how.age} surfaces, {bound}, cells {how.cells}; {around.solar_constant_w_m2:g} W m-2 at 1 au, "
        f"albedo {around.albedo:g}, planetary IR {around.planetary_ir_w_m2:g} W m-2",
    ]


_NOT_SAID = {"kind", "averaged"}  # said in words of their own
_UNITS = {"deg": "deg", "rpm": "rpm"}


def _said(name: str, value: Any) -> str:
    """Say a field of a definition in words: ``roll_deg`` of 5.0 is "roll 5 deg"."""
    words = name.split("_")
    unit = _UNITS.get(words[-1])
    if isinstance(value, tuple):
        value = f"[{', '.join(f'{part:g}' for part in value)}]"
    elif isinstance(value, float):
        value = f"{value:g}"
    return f"{' '.join(words[:-1])} {value} {unit}" if unit else f"{' '.join(words)} {value}"


def _placed(caution: str, where: list[str], cases: int) -> str:
    """Name the cases that a caution is about, unless it is about all."""
    return caution if len(where) == cases else f"{', '.join(where)} {caution}"


def _heard(heard: list[Any]) -> tuple[str, ...]:
    texts = [" ".join(str(warning.message).split()) for warning in heard]
    return tuple(dict.fromkeys(texts))
