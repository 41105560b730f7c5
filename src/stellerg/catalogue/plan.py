"""What a run is asked to do."""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from stellerg.observables import SolarReferences

__all__ = ["Run"]


@dataclass(frozen=True)
class Run:
    """What to do.

    Attributes
    ----------
    source : Path
        See `stellerg.catalogue.readers.open_table`.
    folder : Path or None
        For the results.
    output_format : str
        parquet, csv or ecsv.
    overwrite : bool
        Replace the results of an earlier run.
    shape, correlation, evolutionary_state, solar, k2_weight
        For rows that do not say themselves.
    propagation : mapping
        Keyword arguments of `stellerg.propagate`.
    """

    source: Path
    folder: Path | None
    output_format: str
    overwrite: bool
    shape: str
    correlation: Mapping[tuple[str, str], float]
    evolutionary_state: str
    solar: SolarReferences
    k2_weight: float | None
    propagation: Mapping[str, object]

    def star_options(self) -> dict:
        """Return what the reader of the columns needs."""
        return {
            "shape": self.shape,
            "correlation": self.correlation,
            "evolutionary_state": self.evolutionary_state,
            "solar": self.solar,
            "k2_weight": self.k2_weight,
        }
