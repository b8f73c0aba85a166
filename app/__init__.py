"""The web service: links, sheets, jobs, store, figures, exports and the command line."""

__version__ = "0.1.0"
