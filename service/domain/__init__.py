"""What a sequential test is: plans, observations, states, decisions. Pure; errors know nothing of HTTP."""
