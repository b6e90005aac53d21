"""The errors that a user can put right, told apart by what the workflow does about them."""


class OnbinError(Exception):
    """An error whose message says what was found, what was expected and what to do."""


class SettingsError(OnbinError):
    """The settings or the decisions cannot be used: nothing runs until they are put right."""


class DataError(OnbinError):
    """One recording or one participant cannot be used: the others go on."""
