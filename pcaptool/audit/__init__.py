"""Audit many captures: plan, workers, merge, ledger, verdict."""

from pcaptool.audit.run import AuditResult, Options, run_audit

__all__ = ["AuditResult", "Options", "run_audit"]
