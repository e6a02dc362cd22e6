"""Feeds in partitions, shared out over several instances: who owns which, the log they keep, and taking over.

Nothing is imported here: the client of the brokers is an extra, and a service without [cluster] must not need it.
"""
