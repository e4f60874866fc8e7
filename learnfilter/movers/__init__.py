"""Who decides the robot's next short motion."""
