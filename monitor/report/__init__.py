"""Pages: one self-contained HTML file an evening, and a list of the evenings."""
