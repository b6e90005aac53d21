"""onbin: from raw EEG of a frequency-tagging study to numbers that can be traced."""

__version__ = "0.1.0"
