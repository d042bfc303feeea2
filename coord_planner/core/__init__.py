"""Pure planning code: no files, no clock, no ROS. Time and randomness are passed in."""
