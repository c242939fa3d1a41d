"""The front door: takes a study and what to try on it, and gives back what was found. The command line uses it too."""

from withstand.front.running import inspect, perform, run
from withstand.front.sizing import size

__all__ = ["inspect", "perform", "run", "size"]
