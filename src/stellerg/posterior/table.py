"""The summary as an astropy QTable (the only module of this folder that imports astropy.table)."""

import numpy as np
from astropy.table import MaskedColumn, QTable
from astropy.units import Unit
from astropy.utils.masked import Masked

from stellerg.posterior.columns import Column, conventions, summary_columns
from stellerg.posterior.result import Posterior

__all__ = ["columns_to_table", "to_table"]


def to_table(posterior: Posterior) -> QTable:
    """Return the summary with units, descriptions and the conventions in its metadata."""
    return columns_to_table(summary_columns(posterior), conventions(posterior))


def columns_to_table(columns: list[Column], meta: dict[str, str]) -> QTable:
    """Return columns as a QTable; values that do not exist are masked."""
    table = QTable(meta=meta)
    for column in columns:
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
