"""Tables, figures and files made for a person to read."""
