"""Upturn: watches creep tests, keeps their record and tells a person in time."""

__version__ = "0.1.0"
