"""The exit codes that all commands here share."""

FINE, NO, WRONG_USE, NOT_REACHED, INTERRUPTED = 0, 1, 2, 3, 130
