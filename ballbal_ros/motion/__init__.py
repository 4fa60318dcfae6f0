"""Plans: splines through waypoints, the lean planner, ball moves, the check of a plan against the limits."""
