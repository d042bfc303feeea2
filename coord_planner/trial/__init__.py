"""Simulated fleets and closed-loop rehearsals, without ROS."""
