"""Strandline keeps timestamped event feeds in order although events arrive late."""
