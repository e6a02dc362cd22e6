"""`trace`: where an event is now, and why. The question, the search through the journal, and the answer."""
