"""Plans: what a dispatcher outside Python needs to place tasks as a policy does."""
