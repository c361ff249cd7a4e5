"""What can keep an engine from running; each message ends with what to do."""


class EngineFault(Exception):
    """An embedded engine, its data folder or its port cannot be used."""


class FolderInUse(EngineFault):
    """Another lab holds the data folder."""
