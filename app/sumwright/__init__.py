"""Sumwright: a design notebook for weighted-sum (summing amplifier) stages."""

__version__ = "0.1.0"
