"""`run.json`: all that made the numbers, and what became of the rows. No dates, hosts or paths."""

import json
from dataclasses import asdict
from importlib.metadata import version
from pathlib import Path

from stellerg import constants
from stellerg.catalogue.columns import Columns
from stellerg.catalogue.plan import Run
from stellerg.catalogue.readers import Source
from stellerg.catalogue.tally import Tally
from stellerg.catalogue.writers import put
from stellerg.status import FLAG_TEXT, Flag

__all__ = ["write_record"]


def _engine(engine) -> str | dict:
    """An engine by name, or with its options."""
    return engine if isinstance(engine, str) else {"name": engine.name, **asdict(engine)}


def write_record(folder: Path, plan: Run, source: Source, columns: Columns, propagation, tally: Tally) -> None:
    """`run.json`: all that made the numbers, and what became of the rows."""
    prior = propagation["prior"]
    record = {
        "stellerg": version("stellerg"),
        "input": {"file": source.path.name, "sha256": source.sha256(), "rows": tally.rows},
        "options": {
            "format": plan.output_format,
            "engine": _engine(propagation["engine"]),
            "seed": propagation["seed"],
            "outputs": list(propagation["outputs"]),
            "use": list(propagation["use"] or ()),
            "shape": plan.shape,
            "correlation": {",".join(pair): value for pair, value in plan.correlation.items()},
            "evolutionary_state": plan.evolutionary_state,
            "solar_references": asdict(plan.solar),
            "mean_log_k2_weight": plan.k2_weight,
            "discrepancy": propagation["discrepancy"],
        },
        "conventions": asdict(propagation["conventions"]),
        "prior": {"name": prior.name, "text": prior.text},
        "constants": {name.lower(): getattr(constants, name) for name in constants.__all__},
        "versions": {name: version(name) for name in ("numpy", "scipy", "astropy", "pyarrow")},
        "columns": {
            "observables": list(columns.observables),
            "correlations": sorted(columns.correlations.values()),
            "not_used": list(columns.unrecognised),
            "left_aside": [{"columns": list(names), "rows": count} for names, count in sorted(tally.aside.items())],
        },
        "counts": tally.counts(),
        "flags": {FLAG_TEXT[Flag(flag)].word: count for flag, count in tally.flags.items() if count},
        "catalogue_flags": ["redundant-columns"] if tally.redundant_columns else [],
    }
    text = json.dumps(record, indent=2, ensure_ascii=False) + "\n"
    put(folder / "run.json", lambda path: path.write_text(text, encoding="utf-8"))
