"""The account of a system on one page of HTML that needs no network."""

from .page import write_report

__all__ = ["write_report"]
