"""The mathematics: plain numbers in, frozen values out. Knows no framework, database, clock or randomness."""
