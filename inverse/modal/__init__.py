"""Modes of vibration and their derivatives."""
