"""Route shares: the posterior over emergence, contact and inheritance for one motif.

Part of ``evidence``; may import everything ``evidence`` may.
"""

from twicetold.evidence.shares.bank import Bank, build_bank, estimate_cost
from twicetold.evidence.shares.cache import cache_folder, clear_cache
from twicetold.evidence.shares.posterior import SharesModel, fit_posterior, route_shares
from twicetold.evidence.shares.simplex import Simplex, simplex

__all__ = [
    "Bank",
    "SharesModel",
    "Simplex",
    "build_bank",
    "cache_folder",
    "clear_cache",
    "estimate_cost",
    "fit_posterior",
    "route_shares",
    "simplex",
]
