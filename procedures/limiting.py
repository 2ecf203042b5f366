"""Which supplies take their current limit for their over-current protection."""

from __future__ import annotations

from pathlib import Path

from benchkit.files import BenchFile
from benchkit.harness import Source
from instruments.dialects import SupplyDialect, load_dialect, shipped_dialects


def trips_at_limit(bench: BenchFile, folder: Path | None, source: Source = "supply") -> bool:
    """Whether this source goes off when it reaches its current limit, so that it cannot serve as a
    current source. folder: of the bench file, from which dialects given by path count; where it is
    not known nothing is said of those."""
    found = bench.only("supply") if source == "supply" else bench.battery
    if found is None:
        return False
    given = found[1].dialect
    if given in shipped_dialects():
        dialect = load_dialect(given, SupplyDialect)
    elif folder is not None:
        dialect = load_dialect(folder / given, SupplyDialect)
    else:
        return False
    return dialect.over_current.level is None
