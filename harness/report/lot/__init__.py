"""The report of a lot: many units against one requirement, on one paper."""

from __future__ import annotations

from harness.report.lot.assemble import assemble_lot
from harness.report.lot.material import LotMaterial, gather

__all__ = ["LotMaterial", "assemble_lot", "gather"]
