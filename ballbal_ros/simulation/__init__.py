"""The simulated robot (MuJoCo), its sensors and drives, and the rehearsal of a plan."""
