"""Run folders, the order of stages, resume."""
