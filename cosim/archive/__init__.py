"""The archive: any declared frozen dataclass to HDF5 and back, readable without this package.

    NAME.h5                  root attributes: format, schema_version, created, package_version
      /table/<column>        one dataset per column, one row per run: id, kind, status, start_time,
                             wall_time and each scalar field of the runs, flattened with dots
                             ("free_frame.average_gate_fidelity"), along the scale /table/id
      /runs/000001/          one group per run, a subgroup per nested dataclass
      /plan/                 reserved for the texts that a sweep was planned with
    NAME.h5.parts/*.h5       immutable files of the same layout, not yet merged into NAME.h5

Every file appears whole, by a rename, so that a writer killed at any moment leaves everything
readable that was reported as written. Where a run stands twice, the latest part holds.

A group carries its class name in the attribute `kind`. Numeric datasets carry `units` and
dimension scales, which fields declare in their metadata:

    unit          the unit, "Hz"; "1" where none is given
    unit_from     name of the field that holds the unit, where it is a value
    axes          one name per dimension. An axis that names a field or property of the class, one-
                  dimensional and of the right length, has that as its scale; others get an index
    labels        axis name -> labels along it, ("I", "X", "Y", "Z")
    axis_units    axis name -> unit of a scale that is a property rather than a field
    table         False keeps a field, and all that is in it, out of /table

The rooms: layout (names and root attributes), encoding, decoding, table, files (publishing,
locking, opening), store (the functions below).
"""

from cosim.archive.consolidation import compact, consolidate, merge
from cosim.archive.layout import NumberedRun, RunInfo
from cosim.archive.rows import Row
from cosim.archive.series import Series
from cosim.archive.store import (
    append,
    read,
    read_table,
    read_units,
    record_numbers,
    run_numbers,
    write,
    write_part,
)
from cosim.archive.sweeps import create, read_plan, read_series, write_rows
from cosim.archive.table import cells_of
from cosim.archive.verification import Verification, verify

__all__ = [
    "NumberedRun",
    "Row",
    "RunInfo",
    "Series",
    "Verification",
    "append",
    "cells_of",
    "compact",
    "consolidate",
    "create",
    "merge",
    "read",
    "read_plan",
    "read_series",
    "read_table",
    "read_units",
    "record_numbers",
    "run_numbers",
    "verify",
    "write",
    "write_part",
    "write_rows",
]
