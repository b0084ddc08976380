"""How a user's mistake is said: where it is, what must be, what was found, what to do."""


class SurveyError(Exception):
    """One or more mistakes in a survey's settings, tables or raw files, each one sentence for the user.

    Parameters
    ----------
    *sentences : str
        Ready sentences, normally made by `mistake`.
    """

    def __init__(self, *sentences: str):
        self.sentences = list(sentences)
        super().__init__("\n".join(sentences))


def mistake(where: str, must: str, got: object = None, remedy: str = "") -> str:
    """Build the one shape every message has: where; must be; got; what to do.

    Parameters
    ----------
    where : str
        File, line or row, and key or column: ``"cable.csv row 12, time"``.
    must : str
        What is required: ``"must increase"``.
    got : object, optional
        What was found instead.
    remedy : str, optional
        What the user can do, as a full sentence.

    Returns
    -------
    str
        ``"cable.csv row 12, time: must increase. Got 03:14:05. Sort or remove the row."``

    """
    parts = [f"{where}: {must}."]
    if got is not None:
        text = " ".join(str(got).split())  # one line, whatever was in the file
        parts.append(f"Got {text[:120]}.")
    if remedy:
        parts.append(remedy)
    return " ".join(parts)
