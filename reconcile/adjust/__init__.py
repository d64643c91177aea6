"""Adjustment of readings: arrays in, arrays out."""
