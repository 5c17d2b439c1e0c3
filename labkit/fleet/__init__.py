"""What the user has: servers, choices, the checks at the door, readers and graph families."""
