"""Observers: who could tell whether a feature is there, from the data or from the image."""
