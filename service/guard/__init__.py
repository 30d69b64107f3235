"""May this price leave? Checks and the money in hand, apart from how prices are made."""
