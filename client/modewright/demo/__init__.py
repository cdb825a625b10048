"""The demonstration: a buried pipe of an invented district-heating network cools after its pump has stopped.

``run_demonstration`` does the whole job on the real service. Everything that it shows is invented.
"""

from modewright.demo.run import run_demonstration

__all__ = ["run_demonstration"]
