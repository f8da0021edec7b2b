"""The forms of what comes in and goes out, with an example for each."""
