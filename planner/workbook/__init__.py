"""The client workbook: its layout, declared once, and what reads and writes it."""
