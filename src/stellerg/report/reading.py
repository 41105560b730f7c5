"""How each measurement of a star was read: value, errors, distribution, used or not."""

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from stellerg.measured import Scale, Shape
from stellerg.observables import MEASURABLE
from stellerg.posterior import Posterior
from stellerg.stars import Stars
from stellerg.status import STATUS_TEXT, Status
from stellerg.wording import label

__all__ = ["explanation"]

_SCALE_WORDS = {Scale.DEX: "dex", Scale.MAGNITUDE: "mag"}


def explanation(stars: Stars, posterior: Posterior, row: int = 0) -> RenderableType:
    """Return a table of the measurements of one star as they were understood.

    Parameters
    ----------
    stars : Stars
    posterior : Posterior
        Of the same stars.
    row : int
    """
    table = Table(box=None, pad_edge=False, padding=(0, 3, 0, 0), header_style="dim")
    for heading in ("measurement", "value", "error", "unit", "distribution", "role"):
        table.add_column(heading)
    aside = posterior.aside_sets[posterior.aside[row]]
    for name, measured in stars.measured.items():
        if measured.fault[row] == Status.OK and not measured.usable[row]:
            continue
        shape = Shape(measured.shape[row])
        upper, lower = measured.upper[row], measured.lower[row]
        if shape is Shape.EXACT or upper != upper:
            error = "none"
        else:
            error = f"{upper:g}" if upper == lower else f"+{upper:g} -{lower:g}"
        unit = MEASURABLE[name].unit
        if measured.scale is not Scale.LINEAR:
            unit = _SCALE_WORDS[measured.scale] + (f" of {unit}" if measured.scale is Scale.DEX else "")
        role = ("not named in use" if posterior.use else "left aside as redundant") if name in aside else "used"
        if not measured.usable[row]:
            sentence = STATUS_TEXT[Status(measured.fault[row])].about(name, MEASURABLE[name].unit)
            role = f"not usable: {sentence}"
        distribution = shape.name.lower().replace("_", "-") if measured.usable[row] else ""
        if measured.scale is not Scale.LINEAR and shape is Shape.LOGNORMAL:
            distribution = "normal in " + _SCALE_WORDS[measured.scale]
        table.add_row(label(name), f"{measured.value[row]:g}", error, unit, distribution, role)
    return Group(Text("How the measurements were read", style="bold"), table, Text())
