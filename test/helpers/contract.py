"""Which node publishes and hears which topics, as the stack promises it."""

from __future__ import annotations

PUBLISHED = {
    "simulated_robot": ("/clock", "imu/data", "joint_states", "drive_states", "support", "ground_truth"),
    "balance": ("drive_command", "drive_effort", "odom", "balance_state", "hand_load_estimate"),
    "arm_compensation": ("lean_plan", "arm_command", "plan_report"),
    "whole_body_kinematics": ("center_of_mass", "body_inertia", "com_marker"),
}
SUBSCRIBED = {
    "simulated_robot": ("drive_command", "arm_command", "push", "simulated_load"),
    "balance": (
        *("imu/data", "drive_states", "joint_states", "hand_load", "lean_plan", "cmd_vel", "goal_pose"),
        *("emergency_stop", "support"),
    ),
    "arm_compensation": (
        *("arm_plan", "ball_plan", "hand_wrench_plan", "hand_load", "joint_states", "odom", "balance_state"),
        *("emergency_stop", "hand_load_estimate", "arm_stream"),
    ),
    "whole_body_kinematics": ("joint_states", "hand_load"),
}

LISTENED = {"simulated_robot": {"balance_state", "arm_plan", "plan_report", "emergency_stop"}}
