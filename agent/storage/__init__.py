"""The time series store."""
