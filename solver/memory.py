"""The memory there is, and whether a factorisation fits into it.

The factors of a three-dimensional mesh under nested dissection hold about n^(4/3) entries
(George & Liu, Computer Solution of Large Sparse Positive Definite Systems, 1981).
"""

from __future__ import annotations

import os
from pathlib import Path

from murmesh.solver.errors import SolveError

VARIABLE = "MURMESH_MEMORY"
GIB = 2**30
_MEMINFO = Path("/proc/meminfo")
_CGROUPS = (  # limit, use, statistics; version 2, then version 1
    (Path("/sys/fs/cgroup"), "memory.max", "memory.current"),
    (Path("/sys/fs/cgroup/memory"), "memory.limit_in_bytes", "memory.usage_in_bytes"),
)


def available_memory() -> float:
    """Bytes that can still be used: what the machine and its control group leave; infinite where neither can be asked.

    The environment variable MURMESH_MEMORY, in GiB, overrides it.
    Raises: SolveError when the variable is not a positive number.
    """
    text = os.environ.get(VARIABLE, "")
    if text:
        return _stated(text)
    return min(_machine(), *(_group(*group) for group in _CGROUPS))


def require_memory(needed: float, unknowns: int, single: float | None) -> None:
    """Refuse a factorisation that needs more bytes than there are, and say what would fit.

    `single` is what single precision would need, None where it is not to be had.
    Raises: SolveError.
    """
    available = available_memory()
    if needed <= available:
        return
    fitting = unknowns * (available / needed) ** 0.75
    raise SolveError(
        f"factorising {unknowns} unknowns needs {_gib(needed)}, but {_gib(available)} of memory are available. "
        f"{_offer(single, available)}About {_rounded(fitting)} unknowns would fit: ask for less accuracy, lower orders "
        f"or a coarser mesh, or free memory; {VARIABLE} (in GiB) overrides what counts as available"
    )


def _offer(single: float | None, available: float) -> str:
    if single is None:
        return ""
    verdict = "which fits" if single <= available else "which does not fit either"
    return f"In single precision (the solver 'single') it needs {_gib(single)}, {verdict}. "


def _stated(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = 0.0
    if not value > 0:
        raise SolveError(f"{VARIABLE} is '{text}'; expected a positive number of GiB, e.g. {VARIABLE}=8")
    return value * GIB


def _machine() -> float:
    """MemAvailable of Linux; elsewhere the physical memory."""
    if _MEMINFO.exists():
        fields = dict(line.split(":", 1) for line in _MEMINFO.read_text().splitlines() if ":" in line)
        return float(fields["MemAvailable"].split()[0]) * 1024
    try:
        return float(os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE"))
    except (AttributeError, ValueError, OSError):
        return float("inf")


def _group(folder: Path, limit: str, use: str) -> float:
    """What a control group leaves: its limit, less its use, cached files not counted."""
    try:
        most, used = (float((folder / name).read_text()) for name in (limit, use))
        statistics = dict(line.split() for line in (folder / "memory.stat").read_text().splitlines())
    except (OSError, ValueError):  # no such group, or no limit ("max")
        return float("inf")
    return max(0.0, most - used + float(statistics.get("inactive_file", 0)))


def _gib(size: float) -> str:
    return f"{size / GIB:.3g} GiB"


def _rounded(count: float) -> str:
    return f"{float(f'{count:.2g}'):.0f}"
