"""The pure core: decides, and never waits. No clock, file, socket, randomness or logging in this package."""
