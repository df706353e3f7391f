"""The archive: any declared frozen dataclass to HDF5 and back, readable without this package.

    NAME.h5                  root attributes: format, schema_version, created, package_version
      /table/<column>        one dataset per column, one row per run: id, kind, status, start_time,
                             wall_time, in sweeps checksum, and each scalar field of the runs,
                             flattened with dots ("free_frame.average_gate_fidelity"), along the
                             scale /table/id
      /series/<name>/<n>/    vectors of n samples: values (runs, n), along the scales id and
                             sample, and for each run start, step and carrier_frequency
      /runs/000001/          one group per run that is kept whole, a subgroup per nested dataclass
      /texts/<sha256>        texts of 512 characters or more, once for all runs of a sweep, which
                             link to them
      /plan/                 the dataclass that a sweep was planned with
    NAME.h5.parts/*.h5       immutable files of the same layout, not yet merged into NAME.h5

An archive of single runs has /runs and /table alone. A run of a sweep is a row of the table, with
its series, and has a group in /runs only if it was to be kept whole.

Every file appears whole, by a rename, so that a writer killed at any moment leaves everything
readable that was reported as written. Where a run stands twice, the latest part holds. When there
are more than 100 parts, the small ones become larger parts (`...m.h5`); `consolidate` brings all
into NAME.h5. What was replaced is removed only afterwards.

A row's checksum covers its cells and series (BLAKE2b; see `checksums`), the attribute `checksum`
of a group in /runs or of /plan all that is in it, units and scales included (SHA-256). They go
along unchanged wherever a run is copied, and `verify` computes them again.

One archive has one writer at a time; a lock file beside it (`flock`) sees to that, and readers
need none. The tests run on local disks; for network file systems this follows from what they
promise:

- a rename within a folder is atomic on NFS and Lustre, so that a reader sees a file whole or not
  at all, and what was reported is on the server (fsync of the file and of its folder);
- another machine may see an older listing of the folder as long as its NFS client caches it (up
  to 60 s by default): runs appear late there, and a part that has been merged may seem to be there
  still; reading then starts again, and in the end says to try again;
- `flock` works across the machines of an NFS mount, and on Lustre if mounted with `-o flock`; with
  `-o localflock`, or `local_lock` on NFS, it keeps out writers of the same machine alone, and that
  there is one writer is up to you. Where there are no locks at all `create` and `write_rows` go
  on, since they only add files under new names, but what replaces files is refused (`write`,
  `append`, `compact`, `consolidate`, `merge`): copy the archive with its parts to a local disk;
- so a job array writes an archive for each job, and `merge` makes one of them afterwards.

A group carries its class name in the attribute `kind`. Numeric datasets carry `units` and
dimension scales, which fields declare in their metadata:

    unit          the unit, "Hz"; "1" where none is given
    unit_from     name of the field that holds the unit, where it is a value
    axes          one name per dimension. An axis that names a field or property of the class, one-
                  dimensional and of the right length, has that as its scale; others get an index
    labels        axis name -> labels along it, ("I", "X", "Y", "Z")
    axis_units    axis name -> unit of a scale that is a property rather than a field
    table         False keeps a field, and all that is in it, out of /table

The rooms: layout (names and root attributes), datasets, encoding, decoding, table, series, rows
(what goes into the file of a sweep), checksums, copying and merging (many files into one), files
(naming, listing, opening), publishing (locks, renames); and what others call: store (single runs,
and reading), sweeps, consolidation, verification.
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
