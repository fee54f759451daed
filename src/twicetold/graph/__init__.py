"""Contact graphs over traditions: build, exchange with libpysal, summarise.

Layer rule: may import ``catalogue``; knows nothing of motifs or statistics.
"""

from twicetold.graph.model import ContactGraph

__all__ = ["ContactGraph"]
