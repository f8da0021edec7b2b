"""The routes of the contract, a file for each thing they are about."""
