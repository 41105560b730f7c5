"""The summary as an astropy QTable (the only module of this folder that imports astropy.table)."""

import numpy as np
from astropy.table import MaskedColumn, QTable
from astropy.units import Unit
from astropy.utils.masked import Masked

from stellerg.posterior.columns import summary_columns
from stellerg.posterior.result import Posterior

__all__ = ["to_table"]


def to_table(posterior: Posterior) -> QTable:
    """Return the summary with units, descriptions and the conventions in its metadata.

    Values that do not exist are masked.
    """
    table = QTable()
    table.meta["prior"] = posterior.prior
    table.meta["energy_convention"] = posterior.energy_convention
    table.meta["time_convention"] = posterior.time_convention
    for column in summary_columns(posterior):
        if column.values.dtype == object:
            table[column.name] = MaskedColumn(column.values.astype(str))
        else:
            missing = np.isnan(column.values)
            if column.unit:
                table[column.name] = Masked(column.values, mask=missing) * Unit(column.unit)
            else:
                table[column.name] = MaskedColumn(column.values, mask=missing)
        table[column.name].info.description = column.description
    return table
