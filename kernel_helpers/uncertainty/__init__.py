"""How far an orbit can be trusted."""
