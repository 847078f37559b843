"""Files of prices, vols, dividends and rates -> one checked history, in memory or stored as Parquet.

>>> from data_loaders import load_history, write_history, read_history
"""

from .errors import DataProblems, LoadError, Problem, StoreError
from .history import History, SourceFile
from .loading import load_histories, load_history
from .reading import Reading, ReadingError, readings
from .repairs import Repair
from .store import check_name, history_names, read_history, write_history

__all__ = [
    "DataProblems",
    "History",
    "LoadError",
    "Problem",
    "Reading",
    "ReadingError",
    "Repair",
    "SourceFile",
    "StoreError",
    "check_name",
    "history_names",
    "load_histories",
    "load_history",
    "read_history",
    "readings",
    "write_history",
]
