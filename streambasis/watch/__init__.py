"""The daemon: a monitor run over a feed, its results kept and shown."""
