"""Stages: what a designer writes about one circuit, read into frozen values."""
