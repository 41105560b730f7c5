"""Names and numbers of things as a reader writes them (a leaf)."""

__all__ = ["counted", "label"]

_SPECIAL = {
    "kelvin_helmholtz_time": "Kelvin-Helmholtz time",
    "n_effective": "effective index n",
    "mass_and_structure": "mass with structure",
}


def label(name: str) -> str:
    """Return the name of a quantity in words."""
    return _SPECIAL.get(name, name.replace("_", " "))


def counted(count: int, noun: str) -> str:
    """Return a number of things: ``1 star``, ``2,000 stars``."""
    return f"{count:,} {noun}" + ("" if count == 1 else "s")
