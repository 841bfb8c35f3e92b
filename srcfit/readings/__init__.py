"""Files of readings -> `Readings`, every excluded row with its reason."""

from srcfit.readings.model import Readings
from srcfit.readings.reader import read

__all__ = ["Readings", "read"]
