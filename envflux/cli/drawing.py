"""Pictures, drawn in a process of their own while the next case is computed.

Loading matplotlib takes as long as everything else in a short run, so it is done on the second core.
"""

from __future__ import annotations

import gc
import importlib
import multiprocessing
import signal
from collections.abc import Callable
from multiprocessing.connection import Connection
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

if TYPE_CHECKING:
    import xarray as xr

HISTORY, MEANS = "-history.png", "-means.png"

Against = Literal["time", "orbit angle"]


class Painter:
    """Hands datasets to a drawing process, which starts at once, and waits for its pictures.

    As a context, it stops the process at the end, whether or not that was done.
    """

    def __init__(self) -> None:
        self._line, far = multiprocessing.Pipe()
        # A fresh interpreter: to fork one that has threads in its libraries may hang.
        context = multiprocessing.get_context("spawn")
        self._process = context.Process(target=_serve, args=(far, gc.get_threshold()[0]), daemon=True)
        self._process.start()
        far.close()
        self._open = 0

    def order(self, ds: xr.Dataset, folder: Path, stem: str, against: Against) -> None:
        """Have the pictures of one case drawn into `folder`."""
        self._line.send((ds, folder, stem, against))
        self._open += 1

    def finish(self, done: Callable[[], object]) -> None:
        """Wait for all that was ordered, call `done` after each case, and raise what went wrong."""
        while self._open:
            try:
                trouble = self._line.recv()
            except (EOFError, ConnectionError):
                raise OSError("the process that draws the pictures was stopped") from None
            self._open -= 1
            if trouble is not None:
                raise trouble
            done()

    def stop(self) -> None:
        """End the process now: left to itself, an interpreter takes half a second to tidy up."""
        self._process.kill()
        self._process.join()
        self._line.close()

    def __enter__(self) -> Painter:
        return self

    def __exit__(self, *_: object) -> None:
        if not self._line.closed:
            self.stop()


def _serve(line: Connection, collect_after: int) -> None:
    gc.set_threshold(collect_after)
    # Ctrl-C reaches both processes; the first one decides what it means.
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    # Loaded ahead of the first order.
    for name in ("matplotlib.figure", "matplotlib.backends.backend_agg", "envflux.plots"):
        importlib.import_module(name)
    while True:
        try:
            ds, folder, stem, against = line.recv()
        except EOFError:
            return
        try:
            _draw(ds, folder, stem, against)
        except Exception as trouble:  # it belongs to the other process, which knows what to do
            line.send(trouble)
        else:
            line.send(None)


def _draw(ds: xr.Dataset, folder: Path, stem: str, against: Against) -> None:
    from envflux import plots

    with plots.off_screen():
        panels: Any = plots.flux_history(ds, against=against)
        _save_png(panels.ravel()[0].figure, folder / f"{stem}{HISTORY}")
        if _whole_revolution(ds):
            bars: Any = plots.orbit_mean_bars(ds)
            _save_png(bars.figure, folder / f"{stem}{MEANS}")


def _save_png(figure: Any, path: Path) -> None:
    # What savefig does, less its second pass through everything to find the layout; and little
    # compression: time matters more here than a few kilobytes.
    engine = figure.get_layout_engine()
    if engine is not None:
        engine.execute(figure)
        figure.set_layout_engine("none")
    figure.canvas.print_png(path, metadata={"Software": None}, pil_kwargs={"compress_level": 2})


def _whole_revolution(ds: xr.Dataset) -> bool:
    elapsed = ds["elapsed"].values
    return bool(elapsed[-1] - elapsed[0] >= float(ds["orbital_period"]) * (1 - 1e-9))
