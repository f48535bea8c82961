"""Parquet in and out: schemas, units, hashes and atomic writes."""
