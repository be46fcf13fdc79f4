"""What a person can put right: raised anywhere, turned into one line and exit code 2 by the commands."""


class InputError(Exception):
    """Something given to tilemap is wrong: one sentence saying what, where, and what would be right."""


class NotSoError(Exception):
    """The thing asked about turned out not to be so (a damaged atlas, say): one sentence, exit code 1."""
