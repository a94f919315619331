"""Analyses: attribution, bands, reverse stress, model choice, backtest."""
