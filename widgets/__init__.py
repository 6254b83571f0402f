"""The widgets of firstarc: the Desk and what it is made of."""
