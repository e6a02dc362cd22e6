"""What can be learned from traffic that has been: figures of disorder, every slack at once, captures, replay, advice."""
