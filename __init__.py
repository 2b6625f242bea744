"""Steadfield: a Processing plugin for maps of confidential point records."""


def classFactory(iface):
    """Return the plugin object to the host application."""
    from .plugin.shell import Shell

    return Shell(iface)
