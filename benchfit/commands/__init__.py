"""The commands: arguments in, library called, ``show`` asked. One file each, imported when it is chosen."""
