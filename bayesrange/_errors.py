"""What goes wrong on the user's side, told in the user's words."""


class StudyError(ValueError):
    """A wrong input: its text is one sentence that names the file, row or key and says how to mend it.

    The command line prints the sentence and exits with status 2; nothing has been written by then.
    """
