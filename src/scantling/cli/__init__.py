"""Thin: parse, one call, render, exit status."""
