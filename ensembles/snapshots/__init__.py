"""Data in: series of snapshots, the files that hold them, and their summary."""
