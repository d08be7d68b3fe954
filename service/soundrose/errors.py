"""core: one family of errors; local misuse on one side, a peer's mistakes on the other."""

from collections.abc import Sequence

__all__ = ["ConfigError", "SoundroseError", "StartError", "StreamError", "UsageError", "WireError"]


class SoundroseError(Exception):
    """Base of every error that soundrose raises on purpose. `code` is short and stable; the text may improve."""

    code = "error"


class UsageError(SoundroseError, ValueError):
    """The caller asked for something that cannot be (wrong shape, range or order of calls)."""

    code = "usage"


class ConfigError(SoundroseError, ValueError):
    """Settings that cannot be used; every mistake found, not only the first.

    problems : one line for each mistake: "where: got what; what is allowed".
    """

    code = "config"

    def __init__(self, problems: Sequence[str]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(self.problems))

    def __reduce__(self) -> tuple[type["ConfigError"], tuple[tuple[str, ...]]]:
        return type(self), (self.problems,)


class WireError(SoundroseError):
    """A peer sent something that cannot be used: count it under `reason`, tell, drop that message only."""

    code = "wire"

    def __init__(self, reason: str, detail: str) -> None:
        self.reason, self.detail = reason, detail
        super().__init__(f"{reason}: {detail}")

    def __reduce__(self) -> tuple[type["WireError"], tuple[str, str]]:
        return type(self), (self.reason, self.detail)


class StreamError(SoundroseError):
    """A stream broke: closed, overrun, or gone."""

    code = "stream"


class StartError(SoundroseError):
    """The service cannot start here: a port in use, a store that cannot be written (exit status 3)."""

    code = "start"
