"""What the machine is: description, mass model, ball and drive geometry, loads in the hands."""
