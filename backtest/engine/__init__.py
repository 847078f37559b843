"""The engine: plan, legs, accounts, replay. Arrays of positions and prices, no dates outside the plan."""
