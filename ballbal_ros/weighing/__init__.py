"""The robot weighs itself: postures that tell, what balance says of masses in them, and what remains unknown."""
