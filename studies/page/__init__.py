"""The report: one self-contained HTML page, made from an answer and its findings."""

from .build import DataHealth, build_report

__all__ = ["DataHealth", "build_report"]
