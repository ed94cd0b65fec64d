"""Commissioning: fit the robot that stands there, from recordings of fault-free work."""
