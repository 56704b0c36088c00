"""The build sheet: what was meant to be built, how it was probed; and preferred numbers."""

from benchfit.sheet.model import Build, CaptureChanges, ChannelChoice, Probe, Scope, Sheet

__all__ = ["Build", "CaptureChanges", "ChannelChoice", "Probe", "Scope", "Sheet"]
