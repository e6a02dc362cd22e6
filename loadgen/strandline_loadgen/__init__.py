"""Makes feeds that arrive out of order, sends them, judges what became of them, and measures how fast it went."""
