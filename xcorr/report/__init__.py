"""What a person reads: tables for the terminal and for a paper."""

from xcorr.report.tables import latex_table, text_table

__all__ = ["latex_table", "text_table"]
