"""Object tables in, Parquet and answers about it out."""
