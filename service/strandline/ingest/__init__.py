"""Bodies to columns: what a request carries becomes one arrival, or a reason why not. No ordering lives in here."""
