"""Errors of the mathematics; each carries the argument, the rule and the value received."""


class OutOfRange(ValueError):
    """An argument lies outside the range in which the formula means something."""

    def __init__(self, argument: str, rule: str, received: object) -> None:
        super().__init__(f"{argument} {rule}; received {received!r}")
        self.argument = argument
        self.rule = rule
        self.received = received
