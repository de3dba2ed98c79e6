"""Starter examples shipped with the package (``examples.parquet``), made by ``training_examples/make_starter.py``."""
