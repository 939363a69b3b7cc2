"""The unattended whole: configuration, store, cycle, messages and commands."""

__version__ = "0.1.0"
