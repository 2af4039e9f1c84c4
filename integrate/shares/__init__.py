"""Shares: which ingredient the spread of an answer is due to, by analysis of variance over a factorial."""

from .factorial import Shares, shares

__all__ = ["Shares", "shares"]
