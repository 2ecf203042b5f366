"""The files a user writes: bench, stage and lot, in TOML, with the unit in every key's name."""

from benchkit.files.bench import BenchFile
from benchkit.files.loading import load
from benchkit.files.lot import LotFile
from benchkit.files.stage import StageFile

__all__ = ["BenchFile", "LotFile", "StageFile", "load"]
