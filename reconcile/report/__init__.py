"""Renderers: pure functions from results to text and pages."""
