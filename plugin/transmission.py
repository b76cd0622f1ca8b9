"""The transmission loss of a result between two ports, as people and scripts take it."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from murmesh.plugin.describe import CONVENTION, origin, plain
from murmesh.plugin.files import written
from murmesh.solver.result import Result
from murmesh.solver.transmission import cut_on, outlet_port, transmission_loss, wave_of

REMARK = (
    "10 lg of the power of the incoming plane wave over the power that leaves: right below the first cut-on of the ports, and "
    "of the mesh as it is (no flow, no sound through walls)."
)


@dataclass(frozen=True, eq=False)
class Transmission:
    """Loss (nf,) [dB] between two ports of a result, and the first cut-on [Hz] of the two, above which it is a guess."""

    result: Result
    inlet: str
    outlet: str
    loss: npt.NDArray[np.float64]
    cut_on: float

    @classmethod
    def of(cls, result: Result, outlet: str = "", load_case: str = "") -> Transmission:
        """Raises: ResultError as `transmission_loss`."""
        inlet = wave_of(result, load_case).surface
        port = outlet_port(result, inlet, outlet)
        limit = min(cut_on(result, name) for name in (inlet, port))
        return cls(result, inlet, port, transmission_loss(result, port, load_case), limit)

    @property
    def limit(self) -> str:
        """Up to where it holds, in words."""
        return f"first cut-on of the ports at {self.cut_on:.4g} Hz"


def write_csv(found: Transmission, path: Path) -> Path:
    """Write one row per line."""
    with written(path) as scratch, scratch.open("w", newline="", encoding="utf-8") as stream:
        for remark in (origin(found.result), CONVENTION, f"from {found.inlet} to {found.outlet}, {found.limit}", REMARK):
            stream.write(f"# {plain(remark)}\n")
        table = csv.writer(stream, lineterminator="\n")
        table.writerow(("frequency_hz", "transmission_loss_db"))
        for f, loss in zip(found.result.frequencies, found.loss, strict=True):
            table.writerow((f"{f:.8g}", f"{loss:.3f}" if np.isfinite(loss) else ""))
    return Path(path)
