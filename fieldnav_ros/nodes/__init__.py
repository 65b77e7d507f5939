"""The ROS 2 nodes: the only importers of rclpy besides the command line."""
