"""One thin file per ROS node, and what turns ROS messages and parameters into core types."""
