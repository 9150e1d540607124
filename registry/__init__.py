"""Rollbook: a registry of fleet calibrations with drift monitoring. Its rooms know only those below them."""
