"""Structure models for reading in a terminal, in words (rich)."""

from rich.console import Group, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from stellerg.posterior.text import number
from stellerg.report.prior_document import prior_document
from stellerg.structure.calibration import Calibration
from stellerg.structure.model import StructureModel

__all__ = ["prior_text", "priors_text"]

_ROWS = {"index": "polytropic index n", "coefficient": "structure coefficient w", "log_coefficient": "ln w"}


def priors_text(models: list[StructureModel | Calibration]) -> RenderableType:
    """Return a list of structure models, a block each, ready to print."""
    blocks: list[RenderableType] = []
    for model in models:
        answer = prior_document(model)
        if "calibration" in answer:
            facts = _facts(answer, {"relation": _relation(answer["calibration"])})
        else:
            facts = _facts(answer, {"density": "; ".join(map(_density, answer["intervals"]))})
        blocks += [Text(answer["name"], style="bold"), Padding(Text(_line(answer["summary"])), (0, 0, 0, 2))]
        blocks += [Padding(facts, (0, 0, 0, 2)), Text()]
    return Group(*blocks[:-1])


def prior_text(model: StructureModel | Calibration) -> RenderableType:
    """Return one structure model with its numbers and what it excludes or refuses, ready to print."""
    answer = prior_document(model)
    parts: list[RenderableType] = [Text(answer["name"], style="bold"), Text(_line(answer["summary"])), Text()]
    parts.append(_facts(answer, {"source": _line(answer["source"])}))
    if "calibration" in answer:
        parts += [Text(), *_calibration(answer["calibration"])]
    for interval in answer.get("intervals", ()):
        parts += [Text(), Text(_density(interval), style="bold"), _values(interval), Text()]
        parts += [Text(_excluded(interval)), *_spread(interval), _landmarks(interval)]
    return Group(*parts)


def _line(text: str) -> str:
    return " ".join(text.split())


def _density(interval: dict) -> str:
    words = interval["mass_in_words"]
    return interval["density"] if words == "all masses" else f"{words}: {interval['density']}"


def _facts(answer: dict, first: dict[str, str]) -> Table:
    table = Table.grid(padding=(0, 2, 0, 0))
    table.add_column(no_wrap=True, style="dim")
    table.add_column()
    rows = {**first, "applies to": _applies_to(answer["applies_to"]), "common part": _common(answer["common"])}
    for name, words in rows.items():
        table.add_row(name, Text(words))
    return table


def _applies_to(limits: dict) -> str:
    """The stars that are not refused: one stated evolved needs a model that says so."""
    who = "stars of {:.4g} to {:.4g} solar masses".format(*limits["mass"]) if limits["mass"] else "any star"
    if limits["evolutionary_state"]:
        return f"{who}, whose evolutionary state, if stated, is {' or '.join(limits['evolutionary_state'])}"
    return f"{who} not stated evolved"


def _common(common: dict | None) -> str:
    if common is None:
        return "how much is common to all stars is not stated"
    who = {"all": "all stars", "mass": "stars of like mass"}.get(common["within"])
    who = who or f"stars of one {common['within']!r}"
    if common["scale"] is not None:
        who += f" (Gaussian kernel of scale {common['scale']:.4g} in ln M)"
    if common["fraction"] is None:
        return f"{100.0 * common['standard_deviation']:.4g} % of w (standard deviation of ln w), shared by {who}"
    return f"{100.0 * common['fraction']:.4g} %, shared by {who}"


def _number(value: float | None, digits: int = 4) -> str:
    """A number for reading; rounding about zero is zero."""
    if value is None:
        return "infinite"
    if abs(value) >= 1e5:
        return f"{value:.{digits - 1}e}"
    return number(value if abs(value) > 1e-12 else 0.0, digits=digits)


def _values(interval: dict) -> Table:
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="dim")
    table.add_column("", no_wrap=True)
    for heading in ("mean", "median", "68.27 % interval", "95.45 % interval"):
        table.add_column(heading, justify="right", no_wrap=True)
    for key, name in _ROWS.items():
        values = interval[key]
        spread = values["standard_deviation"] is None or values["standard_deviation"] > 0.0
        intervals = [
            " to ".join(map(_number, values[span])) if spread else "no width" for span in ("interval68", "interval95")
        ]
        table.add_row(name, _number(values["mean"]), _number(values["median"]), *intervals)
    return table


def _excluded(interval: dict) -> str:
    """What lies outside the range, in words."""
    ((low, high), *more), gaps = interval["index"]["ranges"], interval["excluded"]["index"]
    if not gaps:
        return "Excluded: nothing; every index from 0 to 5 is possible."
    if not more and low == high:
        return f"Excluded: everything but n = {_short(low)} (w = {_short(interval['coefficient']['median'])})."
    n = " and ".join(_range("n", piece, 0.0, 5.0) for piece in gaps)
    w = " and ".join(_range("w", piece, 0.6, None) for piece in interval["excluded"]["coefficient"])
    return f"Excluded (at most 1e-9 of the probability): {n} ({w})."


def _range(symbol: str, piece: list[float | None], least: float, most: float | None) -> str:
    lower, upper = piece
    if upper == most:
        return f"{symbol} above {_short(lower)}"
    return f"{symbol} below {_short(upper)}" if lower == least else f"{symbol} from {_short(lower)} to {_short(upper)}"


def _short(value: float) -> str:
    return f"{value:.4g}"


def _spread(interval: dict) -> list[Text]:
    """What the density does to the energy, which is proportional to w."""
    sd = interval["log_coefficient"]["standard_deviation"]
    if not sd:
        return [Text("It adds nothing to the error of the binding energy.")]
    low, high = interval["coefficient"]["interval95"]
    factor = "a factor beyond any number" if high is None else f"a factor of {_number(high / low, 3)}"
    return [
        Text(
            f"By itself it spreads the binding energy by {factor} between the ends of the 95.45 % interval; "
            f"standard deviation of the logarithm {_number(sd, 3)}."
        )
    ]


def _landmarks(interval: dict) -> Table:
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="dim")
    for heading, justify in (("", "left"), ("n", "right"), ("w", "right"), ("where it lies", "left")):
        table.add_column(heading, justify=justify, no_wrap=bool(heading) and len(heading) == 1)
    for mark in interval["landmarks"]:
        table.add_row(mark["name"], f"{mark['index']:.2f}", f"{mark['coefficient']:.3f}", mark["place"])
    return table


def _relation(domain: dict) -> str:
    """What a calibration makes of mass and radius, in one line."""
    nodes = domain["nodes"]
    low, high = (f"{end(nodes['coefficient_zams']):.4g}" for end in (min, max))
    return (
        f"w from mass and radius: {low} to {high} at age zero, growing with the radius as R^gamma, gamma "
        f"{min(nodes['gamma']):.4g} to {max(nodes['gamma']):.4g}, scatter {_scatter(nodes['scatter'])}"
    )


def _scatter(values: list[float]) -> str:
    low, high = (f"{100.0 * end(values):.4g}" for end in (min, max))
    return f"{low} %" if low == high else f"{low} to {high} %"


def _calibration(domain: dict) -> list[RenderableType]:
    """The relation at some masses, and the regions of the plane of mass and radius."""
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="dim")
    headings = ("mass", "R_zams", "w_zams", "effective\nindex n", "gamma", "scatter\nof w", "inflated\nabove R")
    for heading in (*headings, "R at end of\nmain sequence"):
        table.add_column(heading, justify="right", no_wrap=True, vertical="bottom")
    for row in domain["by_mass"]:
        limit = row["radius_limit"]
        table.add_row(
            f"{row['mass']:.4g}",
            *(_number(row[name]) for name in ("radius_zams", "coefficient_zams", "n_effective")),
            f"{row['gamma']:.3f}",
            f"{100.0 * row['scatter']:.1f} %",
            "" if limit is None else _number(limit),
            _number(row["radius_at_end"]),
        )
    count, scatter = len(domain["nodes"]["mass"]), _scatter(domain["nodes"]["scatter"])
    return [
        Text("ln w = ln w_zams(M) + gamma(M) ln(R/R_zams(M)) + scatter", style="bold"),
        table,
        Text(),
        Text(
            "Mass and radius in nominal solar units; R_zams and w_zams: radius and structure coefficient at age zero; "
            f"n = 5 - 3/w. Cubic splines in ln M through {count} nodes, which --json gives. By itself the scatter "
            f"spreads the potential energy by {scatter} (standard deviation of the logarithm)."
        ),
        *_regions("Covered", [place for place in domain["places"] if place["covered"]]),
        *_regions("Refused", [place for place in domain["places"] if not place["covered"]]),
    ]


def _regions(heading: str, places: list[dict]) -> list[RenderableType]:
    table = Table.grid(padding=(0, 2, 0, 0))
    table.add_column(no_wrap=True, style="dim")
    table.add_column()
    for place in places:
        table.add_row(place["name"], Text(place["words"]))
    return [Text(), Text(heading, style="bold"), table]
