"""The real daemon: its processes, sockets, files and signals, used as a user uses them."""
