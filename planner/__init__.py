"""Retirement drawdown planner: a client workbook becomes a withdrawal plan."""

__version__ = "0.1.0"
