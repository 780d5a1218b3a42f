"""What the figures are not for, as commands say it."""

from analysis.caution import CAUTION

__all__ = ["CAUTION"]
