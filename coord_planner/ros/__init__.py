"""The ROS 2 nodes: the only part of the package that imports rclpy or message packages."""
