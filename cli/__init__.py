"""The command line of trackfit: words in, calls of the library, words out."""

from .guard import main

__all__ = ["main"]
