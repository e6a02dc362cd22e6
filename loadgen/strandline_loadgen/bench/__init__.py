"""The benchmark: rows that compare Strandline with a yardstick measured in the same round, in the same process."""
