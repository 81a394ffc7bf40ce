"""Onsets with errors to depths and velocities with intervals."""
