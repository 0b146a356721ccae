"""Measure how share prices react to announced deals."""
