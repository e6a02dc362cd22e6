"""The journal: frames in segments on a disk, group commit, snapshots, and event lines read back.

No ordering, no decisions and no meaning of a record live in this package; see format.md for what lies on the disk.
"""
