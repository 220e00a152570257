"""Stacking stage: a deep template from several epochs of one field."""
