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
from envflux.errors import EnvfluxWarning, InputError

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
    from envflux.tables import CAUTIONS, face_lines, save, write_table

    progress.set_description("track")
    track = mission.fly()
    progress.update()
    lines = _heading(mission, track)
    with results_folder(folder, replace=replace) as fresh:
        try:
            for (mode, environment), stem in stems.items():
                progress.set_description(stem)
                ds = mission.flux(mode, environment, track)
                ds.attrs["title"] = f"{mission.mission.name}: {mode} mode, {environment} environment"
                progress.update()
                if mission.output.plots:
                    artist.order(ds, fresh, stem, mission.output.against)
                save(ds, fresh / f"{stem}.nc")
                write_table(ds, fresh / f"{stem}.csv", title=str(ds.attrs["title"]), cautions=_heard(heard))
                progress.update()
                lines += ["", _case_line(mission, mode, environment), *face_lines(ds)]
            lines += ["", *(f"note: {caution}" for caution in (*CAUTIONS, *_heard(heard)))]
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
    when = f"from {str(time[0])[:19]}Z" if time.dtype.kind == "M" else "from orbit noon, undated"
    revolutions = float(track["elapsed"][-1] - track["elapsed"][0]) / float(track["orbital_period"])
    orbit = (
        f"{mission.orbit.kind} orbit, {revolutions:.4g} revolution{'' if abs(revolutions - 1) < 1e-6 else 's'} {when}"
    )
    return [*lines, "", orbit, *orbit_lines(track)]


def _case_line(mission: Mission, mode: str, environment: str) -> str:
    how, around = mission.modes[mode], mission.environments[environment]
    bound = f"{how.bound} bound"
    if how.bound_absorptance or how.bound_emittance:
        bound = f"a {how.bound_absorptance or how.bound}, e {how.bound_emittance or how.bound}"
    return (
        f"[{mode} / {environment}]  {how.attitude.kind} attitude; {how.age} surfaces, {bound}, "
        f"cells {how.cells}; {around.solar_constant_w_m2:g} W m-2 at 1 au, albedo {around.albedo:g}, "
        f"planetary IR {around.planetary_ir_w_m2:g} W m-2"
    )


def _heard(heard: list[Any]) -> tuple[str, ...]:
    texts = [" ".join(str(warning.message).split()) for warning in heard]
    return tuple(dict.fromkeys(texts))
