"""The heading field: pure numpy, over arrays of any shape."""

from fieldnav_ros.field.approach import approach_heading

__all__ = ["approach_heading"]
