"""People look here: pages made on the server, complete without script."""
