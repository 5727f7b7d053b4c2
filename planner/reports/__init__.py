"""What is said (sections, wording) and how it is drawn (pdf, terminal, export)."""
