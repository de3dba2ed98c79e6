"""Errors, checks, grid and window values, view codes, site pixels and safe writing."""
