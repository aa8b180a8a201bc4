"""A device in software: the controller a bench board must have, and the plant of motors and servos behind it."""
