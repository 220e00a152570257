"""Measure how an arc moves along its normal."""
