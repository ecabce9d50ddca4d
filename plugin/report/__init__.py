"""The report: one self-contained HTML file with figures, made from core results."""
