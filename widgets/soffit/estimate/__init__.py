"""Estimators: arrays in, frozen results out; decimal per period throughout."""
