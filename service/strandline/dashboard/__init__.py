"""The dashboard: its page and modules as they are sent to a browser, and the service's side of what they show.

Reads only: what is seen here is taken from a feed's state and never changes it. `live` has the addresses.
"""
