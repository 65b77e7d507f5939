"""Bags: one episode each, in the layout of rosbag2 with MCAP storage; written, read back, and judged once more."""
