"""Compiled loops: arrays in, results filled into arrays given; no checks, no files, no settings."""
