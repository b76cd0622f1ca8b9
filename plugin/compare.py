"""Two results side by side: what changed in the case, and by how many decibels at every receiver.

change = level of the second - level of the first [dB]: negative where the second is quieter.
"""

from __future__ import annotations

import csv
import json
from collections.abc import Iterator
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from murmesh.plugin.declared import Change, differences
from murmesh.plugin.describe import CONVENTION, origin, plain
from murmesh.plugin.files import written
from murmesh.plugin.summary import Levels, levels
from murmesh.solver.errors import ResultError
from murmesh.solver.levels import Band
from murmesh.solver.orders import orders_text
from murmesh.solver.radiation import is_power, mean_square, places
from murmesh.solver.result import Result

Floats = npt.NDArray[np.float64]
SAME_PLACE = 1e-6
"""Distance [m] below which a receiver has not moved."""
COLUMNS = ("load_case", "receiver", "band", "before_db", "after_db", "change_db")
BARS = (
    "Changes are of computed levels. Each level also has an error bar of its own (`murmesh levels`), and what both runs "
    "leave out (damping of hard walls, air-borne paths) is in both."
)


@dataclass(frozen=True, eq=False)
class Pair:
    """Levels of one receiver in one load case, before and after, in the third octaves that both sweeps touch."""

    before: Levels
    after: Levels
    loss: Floats | None = None
    """Insertion loss (nf,) [dB] line by line, before less after; None where the sweeps differ."""

    @property
    def receiver(self) -> str:
        return self.before.receiver

    @property
    def load_case(self) -> str:
        return self.before.load_case

    @property
    def overall_change(self) -> float:
        """Change of the overall level [dB]; nan where either is silent."""
        return float(_change(self.before.overall, self.after.overall))

    @property
    def bands(self) -> tuple[Band, ...]:
        """The third octaves of both, in order."""
        known = {band.nominal for band in self.after.bands}
        return tuple(band for band in self.before.bands if band.nominal in known)

    def rows(self) -> Iterator[tuple[str, float, float, float]]:
        """(band, before, after, change) [dB]: overall, then the third octaves."""
        yield "overall", self.before.overall, self.after.overall, self.overall_change
        for band in self.bands:
            a, b = (_in_band(item, band) for item in (self.before, self.after))
            yield f"{band.nominal} Hz", a, b, float(_change(a, b))


def _in_band(item: Levels, band: Band) -> float:
    return float(item.band_levels[[b.nominal for b in item.bands].index(band.nominal)])


def _change(before: float, after: float) -> float:
    return after - before if np.isfinite(before) and np.isfinite(after) else float("nan")


@dataclass(frozen=True, eq=False)
class Comparison:
    """What differs between two results, and their levels."""

    before: Result
    after: Result
    changes: tuple[Change, ...]
    pairs: tuple[Pair, ...]
    weighting: str
    left_out: tuple[str, ...]

    @property
    def remarks(self) -> tuple[str, ...]:
        """What to know before the numbers are read."""
        return (f"before: {origin(self.before)}", f"after: {origin(self.after)}", CONVENTION, *self.left_out, BARS)


def compare(before: Result, after: Result, weighting: str = "A") -> Comparison:
    """Compare the receivers and load cases that both results hold.

    Raises ResultError where no receiver and load case is in both.
    """
    changes = [*differences(before.case, after.case), *_solution_changes(before, after)]
    pairs, left_out = [], []
    for name, receiver in _places(before) | _places(after):
        missing = [which for which, held in (("before", before), ("after", after)) if (name, receiver) not in _places(held)]
        if missing:
            left_out.append(
                f"receiver '{receiver}' in load case '{name}' is not in the result '{missing[0]}': no change shown"
            )
            continue
        loss, why = _loss(before, after, receiver, name)
        left_out += [why] if why and _same_lines(before, after) else []
        pair = Pair(levels(before, receiver, name, weighting), levels(after, receiver, name, weighting), loss)
        if pair.before.spectrum != pair.after.spectrum:
            left_out.append(f"load case '{name}' holds tones in one result and a density in the other: no change shown")
        else:
            pairs.append(pair)
    if not pairs:
        raise ResultError(
            "the two results share no receiver and load case of one kind, so no levels can be compared; "
            f"before has {_list(before)}, after has {_list(after)}: give them the same names"
        )
    if not _same_lines(before, after):
        left_out.append("the sweeps differ: bands hold what each sweep covers of them, so levels may differ for that alone")
    order = {place: i for i, place in enumerate(_places(before))}
    pairs.sort(key=lambda pair: order[pair.load_case, pair.receiver])
    return Comparison(before, after, tuple(changes), tuple(pairs), weighting, tuple(dict.fromkeys(left_out)))


def _places(result: Result) -> dict[tuple[str, str], None]:
    return {(held.name, place): None for held in result.load_cases for place in places(result, held.name)}


def _same_lines(before: Result, after: Result) -> bool:
    return len(before.frequencies) == len(after.frequencies) and np.allclose(before.frequencies, after.frequencies)


def insertion_loss(without: Result, with_: Result, place: str, load_case: str = "") -> Floats:
    """Level without less level with a measure (nf,) [dB], at a receiver or of a radiated power; nan where either is silent.

    Raises: ResultError where the sweeps or the kinds of spectrum differ, the place is not in both, or the receiver has moved.
    """
    if not _same_lines(without, with_):
        raise ResultError("the two sweeps differ, so there is no insertion loss line by line; solve both on the same lines")
    cases = [result.load_case_of(load_case) for result in (without, with_)]
    if cases[0].spectrum != cases[1].spectrum:
        raise ResultError(
            f"load case '{cases[0].name}' holds {cases[0].spectrum} in one result and {cases[1].spectrum} in the other, so "
            "there is no insertion loss; give both the same spectrum"
        )
    if not is_power(place):
        _check_place(without, with_, place)
    squares = [mean_square(result, place, load_case) for result in (without, with_)]
    heard = (squares[0] > 0) & (squares[1] > 0)
    old, new = (np.where(heard, square, 1.0) for square in squares)
    return np.where(heard, 10 * np.log10(old / new), np.nan)


def _check_place(without: Result, with_: Result, name: str) -> None:
    a, b = (result.case.receivers[result.receiver(name)] for result in (without, with_))
    if not np.allclose(a.position, b.position, atol=SAME_PLACE) or a.radius != b.radius:
        raise ResultError(
            f"receiver '{name}' is at {a.position} m (radius {a.radius:g} m) in one result and at {b.position} m (radius "
            f"{b.radius:g} m) in the other, so there is no insertion loss; give it one place in both"
        )


def _loss(before: Result, after: Result, place: str, load_case: str) -> tuple[Floats | None, str]:
    """The insertion loss, or none and why."""
    try:
        return insertion_loss(before, after, place, load_case), ""
    except ResultError as problem:
        return None, str(problem)


def _list(result: Result) -> str:
    return ", ".join(f"{receiver} in {name}" for name, receiver in _places(result)) or "none"


def _solution_changes(before: Result, after: Result) -> Iterator[Change]:
    """What differs in how the two were solved, not in what was asked."""
    texts = orders_text(before.orders), orders_text(after.orders)
    if texts[0] != texts[1]:
        yield Change("solution/orders", *texts)
    for key in ("method", "unknowns", "murmesh"):
        held = before.provenance.get(key, ""), after.provenance.get(key, "")
        if held[0] != held[1]:
            yield Change(f"solution/{key}", *held)


def comparison_tree(found: Comparison) -> dict[str, object]:
    """The comparison as plain numbers and texts; null where a level is silence."""

    def number(value: float) -> float | None:
        return round(value, 3) if np.isfinite(value) else None

    places = [
        {
            "load_case": pair.load_case,
            "receiver": pair.receiver,
            "spectrum": pair.before.spectrum,
            "unit": pair.before.unit,
            "levels": [
                {"band": name, "before": number(a), "after": number(b), "change": number(change)}
                for name, a, b, change in pair.rows()
            ],
        }
        for pair in found.pairs
    ]
    remarks = [plain(text) for text in found.remarks]
    return {"remarks": remarks, "changes": [asdict(change) for change in found.changes], "receivers": places}


def write_json(found: Comparison, path: Path) -> Path:
    """Write `comparison_tree`."""
    with written(path) as scratch:
        scratch.write_text(json.dumps(comparison_tree(found), indent=1, allow_nan=False) + "\n", encoding="utf-8")
    return Path(path)


def write_losses(found: Comparison, path: Path) -> Path:
    """Write the insertion loss line by line, one row per load case, place and frequency."""
    with written(path) as scratch, scratch.open("w", newline="", encoding="utf-8") as stream:
        for remark in (*found.remarks, "insertion loss: level before less level after [dB], positive is quieter"):
            stream.write(f"# {plain(' '.join(remark.split()))}\n")
        table = csv.writer(stream, lineterminator="\n")
        table.writerow(("load_case", "receiver", "frequency_hz", "insertion_loss_db"))
        for pair in found.pairs:
            for f, loss in zip(found.before.frequencies, () if pair.loss is None else pair.loss, strict=False):
                table.writerow((pair.load_case, pair.receiver, f"{f:.8g}", f"{loss:.3f}" if np.isfinite(loss) else ""))
    return Path(path)


def write_csv(found: Comparison, path: Path) -> Path:
    """Write one row per load case, receiver and band; remarks and changes of the case stand above behind '#'."""
    with written(path) as scratch, scratch.open("w", newline="", encoding="utf-8") as stream:
        listed = [f"changed: {change.where}: {change.before} -> {change.after}" for change in found.changes]
        for remark in (*found.remarks, f"levels in {found.pairs[0].before.unit}", *listed):
            stream.write(f"# {plain(' '.join(remark.split()))}\n")
        table = csv.writer(stream, lineterminator="\n")
        table.writerow(COLUMNS)
        for pair in found.pairs:
            for name, *values in pair.rows():
                cells = (f"{value:.3f}" if np.isfinite(value) else "" for value in values)
                table.writerow((pair.load_case, pair.receiver, name, *cells))
    return Path(path)
