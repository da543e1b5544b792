"""Formula and rows in; validated columns, units, periods and an account of every row out."""

from mixbridge.panel.accounting import Accounting
from mixbridge.panel.build import build_panel
from mixbridge.panel.record import HeldPanel, Panel

__all__ = ["Accounting", "HeldPanel", "Panel", "build_panel"]
