"""Preparing at home: the verb ``fieldnav pretune``, its workers and files. Knows no ROS."""
