"""Logs made elsewhere (delimited text, WAV, HDF5) become runs."""

from freqid.capture.logs.import_settings import ImportSettings, RigFacts
from freqid.capture.logs.log_file import open_log
from freqid.capture.logs.log_table import LogColumn, LogTable
from freqid.capture.logs.periodicity import find_periodicity
from freqid.capture.logs.run_from_logs import run_from_one_log, run_from_profile, run_from_two_logs

__all__ = [
    "ImportSettings",
    "LogColumn",
    "LogTable",
    "RigFacts",
    "find_periodicity",
    "open_log",
    "run_from_one_log",
    "run_from_profile",
    "run_from_two_logs",
]
