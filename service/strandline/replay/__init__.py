"""What traffic that has been can teach: figures of disorder, every slack at once, captures, replay, advice."""
