"""Several designs of one machine side by side: levels, insertion loss against a reference, and where the power goes.

insertion loss = level of the reference - level of the variant at the same place [dB]: positive where the variant is quieter.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from murmesh.plugin.balance import Balance, balance
from murmesh.plugin.describe import CONVENTION, plain
from murmesh.plugin.files import written
from murmesh.plugin.summary import PARTIAL, Levels, levels, shown
from murmesh.solver.levels import Band, power_level
from murmesh.solver.power import RADIATED_LABEL
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Variant:
    """A design by name, its result, and its power balance over the sweep."""

    name: str
    result: Result

    def levels(self, receiver: str) -> Levels:
        """A-weighted levels at a receiver."""
        return levels(self.result, receiver)

    @property
    def balance(self) -> Balance:
        """What is put in and taken over the whole sweep, of the first load case."""
        return balance(self.result)

    @property
    def radiated(self) -> float:
        """Power [W] that leaves."""
        return sum(w for label, w in self.balance.taken.items() if label.startswith(RADIATED_LABEL))


@dataclass(frozen=True, eq=False)
class Loss:
    """Insertion loss [dB] of a variant at a receiver: of the A-weighted level, and of the third octaves wholly swept."""

    overall: float
    bands: tuple[Band, ...]
    values: Floats


@dataclass(frozen=True, eq=False)
class Variants:
    """Designs in order, and the one without treatment that they are compared with."""

    reference: Variant
    others: tuple[Variant, ...]

    @property
    def all(self) -> tuple[Variant, ...]:
        """The reference first."""
        return (self.reference, *self.others)

    @property
    def receivers(self) -> tuple[str, ...]:
        """Names of the receivers."""
        return tuple(receiver.name for receiver in self.reference.result.case.receivers)

    def loss(self, variant: Variant, receiver: str) -> Loss:
        """What a variant brings at a receiver."""
        return loss_between(self.reference.result, variant.result, receiver)


def loss_between(reference: Result, result: Result, receiver: str) -> Loss:
    """Level of `reference` minus level of `result` at `receiver`, over the sweep (A-weighted) and per third octave."""
    before, after = levels(reference, receiver), levels(result, receiver)
    whole = np.minimum(before.coverage, after.coverage) > PARTIAL
    bands = tuple(band for band, kept in zip(before.bands, whole, strict=True) if kept)
    return Loss(before.overall - after.overall, bands, (before.band_levels - after.band_levels)[whole])


def split(variant: Variant) -> dict[str, float]:
    """Part of the input that each label takes, in [0, 1]; together 1."""
    found = variant.balance
    return {label: w / found.total for label, w in found.taken.items()}


def loss_rows(found: Variants) -> Iterator[tuple[str, str, str, float, float]]:
    """(variant, receiver, band, level, insertion loss): over all, then the third octaves."""
    for variant in found.all:
        for receiver in found.receivers:
            loss, heard = found.loss(variant, receiver), variant.levels(receiver)
            yield variant.name, receiver, "overall", heard.overall, loss.overall
            known = dict(zip((band.nominal for band in heard.bands), heard.band_levels, strict=True))
            for band, value in zip(loss.bands, loss.values, strict=True):
                yield variant.name, receiver, f"{band.nominal} Hz", float(known[band.nominal]), float(value)


def write_losses(found: Variants, path: Path) -> Path:
    """Levels and insertion losses as CSV."""
    rows = (f"{v},{r},{b},{level:.2f},{loss:.2f}" for v, r, b, level, loss in loss_rows(found))
    return _write(found, path, "variant,receiver,band,level_dba,insertion_loss_db", rows)


def write_powers(found: Variants, path: Path) -> Path:
    """Where the power goes as CSV, over the sweep."""
    rows = (
        f"{variant.name},{label},{share * variant.balance.total:.6g},{share:.6f}"
        for variant in found.all
        for label, share in split(variant).items()
    )
    return _write(found, path, "variant,taken_by,power_w,part_of_input", rows)


def _write(found: Variants, path: Path, columns: str, rows: Iterator[str]) -> Path:
    remarks = [found.reference.result.case.title, CONVENTION, f"insertion loss against '{found.reference.name}'"]
    remarks += [f"{variant.name}: case {variant.result.case.checksum[:8]}" for variant in found.all]
    with written(path) as scratch:
        head = "".join(f"# {plain(remark)}\n" for remark in remarks)
        scratch.write_text(head + columns + "\n" + "\n".join(rows) + "\n", encoding="utf-8")
    return Path(path)


def summary_rows(found: Variants) -> list[tuple[str, ...]]:
    """Per variant: level and insertion loss at every receiver, radiated power level, parts radiated and absorbed."""
    rows = []
    for variant in found.all:
        cells = [variant.name]
        for receiver in found.receivers:
            loss, heard = found.loss(variant, receiver).overall, variant.levels(receiver)
            bar = heard.bars.overall if heard.bars else float("nan")
            cells += [shown(heard.overall, bar), "-" if variant is found.reference else f"{loss:+.1f}"]
        part = variant.radiated / variant.balance.total
        cells += [f"{float(power_level(variant.radiated)):.1f}", f"{100 * part:.1f} %", f"{100 * (1 - part):.1f} %"]
        rows.append(tuple(cells))
    return rows


def summary_header(found: Variants) -> tuple[str, ...]:
    """The columns of `summary_rows`."""
    heard = [cell for receiver in found.receivers for cell in (f"{receiver} [dB(A)]", "gain [dB]")]
    return ("variant", *heard, "radiated [dB re 1 pW]", "radiated", "absorbed")
