"""What the package raises when an input is wrong: one sentence that says what, where and what to do."""


class InputError(ValueError):
    """An input that cannot be used as it is.

    The message gives the value found, the value expected and the cure, and names the file, row, column or key.
    """


class MovieError(InputError):
    """The movie cannot be read, or is not a movie that can be analysed."""


class ChannelError(MovieError):
    """The movie holds several channels, of which one must be chosen.

    Attributes
    ----------
    titles : tuple of str
        Number and name of each channel.
    """

    def __init__(self, message: str, *, titles: tuple[str, ...]) -> None:
        super().__init__(message)
        self.titles = titles


class ProtocolError(InputError):
    """The stimulation protocol is incomplete, contradicts itself or does not fit the movie."""


class TooFewResponsesError(InputError):
    """Too few stimuli can be fitted to look for boutons by their responses."""


class BoutonFileError(InputError):
    """A file of bouton positions, a label image or an axon path cannot be used."""


class OutputError(InputError):
    """The results cannot be written where they were asked for."""


class SavedAnalysisError(InputError):
    """A saved analysis cannot be reopened."""


class AnalysisWarning(UserWarning):
    """A doubt about a whole recording that the user should know of."""
