"""Line formation: from a model atmosphere to equivalent widths."""

from .equivalent_width import reduced_widths, reduced_widths_reference

__all__ = ["reduced_widths", "reduced_widths_reference"]
