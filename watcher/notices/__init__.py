"""Notices on their way: what they say, when they leave, and one file for each kind of route."""
