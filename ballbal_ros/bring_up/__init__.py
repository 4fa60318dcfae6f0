"""First power-on of a real drive, the robot hung up: what its encoders count and what its actuators push."""
