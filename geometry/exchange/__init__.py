"""Pose lists in open formats: one module a format, each with ``write`` and, where it makes sense, ``read``."""
