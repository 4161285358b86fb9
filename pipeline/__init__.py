"""From a bump-test log to a starting gain: the stages, left to right, and the command."""

__version__ = "0.1.0"
