"""Years of records: many files through one map, on one machine's processes or on a Spark cluster."""
