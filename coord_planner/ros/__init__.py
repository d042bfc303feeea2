# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The ROS 2 nodes: the only part of the package that imports rclpy or message packages."""
