"""Tillwright: from till records to price indexes that can be published and defended.

This package's top holds what researchers call, frame in, frame out: `bilateral` and `multilateral`
indexes, `indexes` of many methods side by side with their standard errors, the `replicates` that these
are made of, `contributions` of products, `place_levels`, and `hedonic` indexes.  Layers below import
downwards only; see DEVELOPERS.md.
"""

from tillwright.api.contributions import contributions
from tillwright.api.hedonics import Hedonics, hedonic
from tillwright.api.indexes import bilateral, indexes, multilateral, replicates
from tillwright.api.places import place_levels

__all__ = ["Hedonics", "bilateral", "contributions", "hedonic", "indexes", "multilateral", "place_levels", "replicates"]
__version__ = "0.1.0"
