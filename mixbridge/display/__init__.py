"""Text made safe to show, and small pieces of HTML for notebooks. Nothing is computed here."""

from mixbridge.display.fragments import Printed, fragment, preformatted, table
from mixbridge.display.visible import visible

__all__ = ["Printed", "fragment", "preformatted", "table", "visible"]
