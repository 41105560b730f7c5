"""What was learned of the structure of stars, in words."""

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from stellerg.structure.learning import LearnedPrior
from stellerg.wording import counted, label

__all__ = ["learned_text"]

_NAMES = {"mean": "mean index", "spread": "spread from star to star", "slope": "slope with ln M"}


def learned_text(learned: LearnedPrior, file: str) -> RenderableType:
    """Return the posterior of the hyperparameters, the predictive checks, and what to do with the file."""
    head = f"Learned from {counted(learned.stars, 'star')} with {', '.join(map(label, learned.observables))}"
    found = Table(box=None, pad_edge=False, padding=(0, 3, 0, 0), header_style="dim")
    for heading in ("", "mean", "standard deviation"):
        found.add_column(heading, justify="left" if not heading else "right")
    for name, (mean, sd) in learned.summary().items():
        found.add_row(_NAMES.get(name, name), f"{mean:.3f}", f"{sd:.3f}")
    checks = Table(box=None, pad_edge=False, padding=(0, 3, 0, 0), header_style="dim")
    for heading in ("posterior predictive check", "observed", "95.45 % of replications", "probability"):
        checks.add_column(heading, justify="left" if heading.startswith("post") else "right")
    for check in learned.checks:
        low, high = check.interval
        checks.add_row(check.name, f"{check.observed:.3f}", f"{low:.3f} to {high:.3f}", f"{check.probability:.2g}")
    numbers = learned.diagnostics
    words = [f"Chains: {', '.join(f'{name} {value:.4g}' for name, value in numbers.items())}."]
    words += [
        f"Written to {file}: use it with --prior {file}. Stars it was learned from are flagged used-in-training: their "
        "structure observables must not count twice."
    ]
    return Group(Text(head, style="bold"), Text(), found, Text(), checks, Text(), *map(Text, words))
