"""The spec file: models, loading with line numbers, starter spec."""
