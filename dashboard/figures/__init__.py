"""Rows to plotly figures: pure, tested without a browser."""
