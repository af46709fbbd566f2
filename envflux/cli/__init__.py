"""The command `envflux`.

Only what `--help` needs is imported here: the rest loads when a command runs.
"""

from __future__ import annotations

import argparse
import gc
import sys
import traceback
from collections.abc import Sequence
from importlib.metadata import version
from typing import NoReturn

from envflux.cli.keys import ATTITUDES, ORBITS, TABLES, listed
from envflux.errors import InputError

OK, FAILED, WRONG_INPUT, INTERRUPTED = 0, 1, 2, 130
"""Exit codes. 130 is what a shell reports after Ctrl-C: 128 + signal 2."""

_EPILOG = """\
examples:
  envflux run examples/imager.toml --out results
      direct solar, albedo and planetary infrared flux on every face, for every mode
      and environment of the mission file
  envflux run my-mission.toml --out results --replace
      the same again after a change, over the results of the run before

  envflux run --help tells what is written. The files in examples/ are commented: copy
  the nearest one and change it.

exit codes: 0 done, 1 failed, 2 wrong input (one line says what), 130 interrupted

The numbers are inputs to a thermal analysis that the responsible engineer reviews
against the programme's own standards and margins.
"""

_RUN_EPILOG = f"""\
FILE.toml has these tables:
  [mission]              name, description
  [orbit]                kind = "circular", "sun-synchronous", "kepler", "undated", "tle" or "omm",
                         and what that kind needs (altitude_km, epoch, ...)
  [track]                revolutions or duration_s, step_s, start     (left out: one revolution)
  [coatings.NAME]        absorptance, emittance, ... or catalogue = "C025"
  [craft]                box = {{size_m = [x, y, z], coating = "NAME"}}, and/or
  [[craft.faces]]        name, normal, area_m2, coating, back
  [modes.NAME]           attitude = {{kind = "nadir", ...}}, age, bound, cells
  [environments.NAME]    solar_constant_w_m2, albedo, planetary_ir_w_m2, or preset = "..."
  [output]               plots, against                               (optional)

Keys of [orbit], by kind; those in brackets may be left out:
{listed(ORBITS)}
sun-synchronous needs one of ltan_hours and ltdn_hours; kepler the semi-major axis or both altitudes.
tle and omm take file = "..." in place of the rest.

Keys of attitude, by kind:
{listed(ATTITUDES)}

Keys of other tables:
{listed(TABLES)}
Hot is bound_absorptance = "maximum" with bound_emittance = "minimum".

For every mode and environment DIR receives
  MODE--ENVIRONMENT.nc         everything, netCDF-4 with CF attributes
  MODE--ENVIRONMENT.csv        one row per sample; each header names quantity, face and unit
  MODE--ENVIRONMENT.json       what each column of the CSV is, what made it, and cautions
  MODE--ENVIRONMENT-*.png      flux histories and orbit means
and once summary.txt, which is also printed, and a list of the files written.

DIR is made if need be. If it holds anything, the run is refused unless --replace is given;
then files of the run before are replaced, and no other file is touched. Results appear only
once all of them are ready.
"""


class _Parser(argparse.ArgumentParser):
    """Complains in one line, like everything else here."""

    def error(self, message: str) -> NoReturn:
        self.exit(WRONG_INPUT, f"{self.prog}: {message}; '{self.prog} --help' tells more\n")


def _parser() -> argparse.ArgumentParser:
    layout = argparse.RawDescriptionHelpFormatter
    parser = _Parser(
        prog="envflux",
        description="The orbital heating environment of spacecraft: flux on every face, from a mission file.",
        epilog=_EPILOG,
        formatter_class=layout,
    )
    parser.add_argument("--version", action="version", version=f"envflux {version('envflux')}")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True, parser_class=_Parser)
    run = commands.add_parser(
        "run",
        help="compute all cases of a mission file and write datasets, tables and plots",
        description="Compute all cases of a mission file and write datasets, tables and plots.",
        epilog=_RUN_EPILOG,
        formatter_class=layout,
    )
    run.add_argument("file", metavar="FILE.toml", help="the mission file")
    run.add_argument("--out", metavar="DIR", required=True, help="folder for the results")
    run.add_argument("--replace", action="store_true", help="replace the results of an earlier run in DIR")
    run.add_argument("--debug", action="store_true", help="on an unexpected failure, show where it happened")
    return parser


def run_process() -> int:
    """Run the command line as the only thing this process does: the entry point.

    Imports make objects by the hundred thousand, and all of them stay. Looking through them for garbage
    again and again, and once more at the end, would take a fifth of a short run.
    """
    gc.set_threshold(100_000)
    code = main()
    gc.freeze()
    return code


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str, optional
        What follows the word ``envflux``; taken from the command line by default.

    Returns
    -------
    int
        The exit code.
    """
    options = _parser().parse_args(arguments)
    try:
        from envflux.cli.pipeline import run_mission

        run_mission(options.file, options.out, replace=options.replace)
    except InputError as error:
        return _complain(str(error), WRONG_INPUT)
    except KeyboardInterrupt:
        return _complain("interrupted; nothing was written", INTERRUPTED)
    except BrokenPipeError:
        # Whoever read our output has gone, e.g. `| head`: no reason to complain. The stream is pointed
        # elsewhere, or Python would complain about it itself at exit.
        sys.stdout = None  # print and exit both take None as no output
        return FAILED
    except OSError as error:
        return _complain(str(error), FAILED)
    except Exception as error:
        if options.debug:
            traceback.print_exc()
        return _complain(f"unexpected {type(error).__name__}: {error}; --debug shows where", FAILED)
    return OK


def _complain(message: str, code: int) -> int:
    print(f"envflux: {' '.join(message.split())}", file=sys.stderr)
    return code
