"""Run folders, the order of stages, resume."""

from circuitgen.run.build import Outcome, build

__all__ = ["Outcome", "build"]
