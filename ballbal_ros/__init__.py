"""Balance and arm compensation for a mobile manipulator that stands on one rolling ball."""

__version__ = "0.1.0"
