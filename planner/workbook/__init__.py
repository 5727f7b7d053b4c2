"""The client workbook: its declaration, reader and writer."""
