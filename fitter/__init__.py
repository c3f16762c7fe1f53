"""mufitter: what a table of supernova distances says about dark energy."""

__version__ = "0.1.0"
