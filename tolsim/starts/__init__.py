"""Questions about switching on: a map of starts, a contract with the supply, repeated starts."""
