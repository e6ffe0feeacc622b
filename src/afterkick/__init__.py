"""From a continuous-time model to integer C in a sampling interrupt.

The road, in the order the folders are read: ``design`` (the file), ``model`` (exact, in s), ``sampling`` (exact, in z),
``fixed`` (integers), ``emit`` (C), ``bench`` (the compiled C).  Each stage is a pure function from one frozen class to
the next, and no stage imports a later one.
"""

__all__ = ["__version__"]

__version__ = "0.1.0"
