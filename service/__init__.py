"""Sequential probability ratio tests as a service: post observations, learn whether sampling may stop."""
