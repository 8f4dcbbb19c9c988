"""The daemon: builds the parts, schedules looks and notices, serves page and metrics, handles signals.

With the commands it is the only reader of the wall clock. Children import this package, so nothing is imported here.
"""
