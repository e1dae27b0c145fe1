"""The parts that screens are made of; each draws what it is given and posts what the person asked for."""
