"""Reports: CSV, Parquet, JSON, HTML, and text for a terminal."""

from pcaptool.report.folder import Audit, audit

__all__ = ["Audit", "audit"]
