"""VTK surfaces (.vtp) with the gains of a treatment study on every panel, as cell arrays."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import numpy.typing as npt

from murmesh.plugin.describe import CONVENTION, origin, plain
from murmesh.plugin.export import EXPORTS
from murmesh.plugin.export.vtk_cells import surface_mesh, write_xml
from murmesh.plugin.sampling import sample_skin
from murmesh.plugin.study import QUIETER, Measure, Study

Floats = npt.NDArray[np.float64]


@EXPORTS.member("gains_vtp", ".vtp", "gains of every treatment on every panel for VTK readers", source="study")
def write(study: Study, path: Path) -> Path:
    """Write one cell array per treatment, `gain_NAME_db`, one for quietening, and `chosen`: 1 on panels of the choice.

    nan where a treatment may not go.
    """
    skin = sample_skin(study.result.space)
    words = {
        "convention": CONVENTION,
        "units": f"gain_..._db: level before less level after [dB({study.goal.weighting})], positive is quieter, nan where it "
        f"may not go; gain_quieten_db: the panel's velocity lowered by {QUIETER:g} dB",
        "origin": origin(study.result),
    }
    arrays = {name: values[skin.surface] for name, values in panel_gains(study).items()}
    plain_words = {name: plain(text) for name, text in words.items()}
    return write_xml(surface_mesh(skin.cloud.points, skin.triangles, {}, plain_words, cells=arrays), path)


def panel_gains(study: Study) -> dict[str, Floats]:
    """Values by the index of the surface in the case; a last nan stands for faces that no surface holds."""
    names = [surface.name for surface in study.result.case.surfaces]

    def on_panels(measures: list[Measure]) -> Floats:
        out = np.full(len(names) + 1, np.nan)
        for measure in measures:
            out[names.index(measure.panel)] = measure.gain
        return out

    arrays = {"gain_quieten_db": on_panels(list(study.quieten))}
    for treatment in dict.fromkeys(m.treatment for m in study.treat):
        arrays[f"gain_{treatment}_db"] = on_panels([m for m in study.treat if m.treatment == treatment])
    chosen = np.zeros(len(names) + 1)
    chosen[[names.index(option.panel) for option in study.used(study.best)]] = 1.0
    return arrays | {"chosen": chosen}
