"""Files of prices, vols, dividends and rates -> one checked history, in memory or stored as Parquet.

>>> from data_loaders import load_history, write_history, read_history
"""

from .errors import DataProblems, LoadError, Problem, StoreError
from .history import History, SourceFile, load_history
from .repairs import Repair
from .store import check_name, history_names, read_history, write_history

__all__ = [
    "DataProblems",
    "History",
    "LoadError",
    "Problem",
    "Repair",
    "SourceFile",
    "StoreError",
    "check_name",
    "history_names",
    "load_history",
    "read_history",
    "write_history",
]
