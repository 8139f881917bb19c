"""What goes wrong and how it is said: one line that tells what was given, why it cannot be, and what would work."""


class InputError(ValueError):
    """Bad input from outside: a scene file, an argument, a folder.

    Parameters
    ----------
    problems : sequence of str
        One complete line a problem. All problems of an input are raised together.
    """

    def __init__(self, *problems: str):
        self.problems = list(problems)
        super().__init__("\n".join(self.problems))


class CacheWarning(UserWarning):
    """A cache file was left unused (damaged, foreign, or its folder cannot be written); the result is not affected."""
