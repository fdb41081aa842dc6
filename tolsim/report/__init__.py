"""The report: one self-contained page that needs neither network nor scripts."""

from tolsim.report.content import InputRow, ReportInput, Waveform, report_input
from tolsim.report.page import render, write_report

__all__ = ["InputRow", "ReportInput", "Waveform", "render", "report_input", "write_report"]
