"""Tillwright: from till records to price indexes that can be published and defended.

This package's top holds what researchers call: `bilateral` and `multilateral`, frame in, frame
out.  Layers below import downwards only; see DEVELOPERS.md.
"""

from tillwright.api import bilateral, multilateral

__all__ = ["bilateral", "multilateral"]
__version__ = "0.1.0"
