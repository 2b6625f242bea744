"""What a module may not say if it is to run on every host version, old Qt or new."""

import ast

# gone in Qt 6, see "Porting to Qt 6" in the Qt documentation
GONE = {
    "exec_": "exec",
    "QDesktopWidget": "QScreen",
    "QMatrix": "QTransform",
    "QRegExp": "QRegularExpression",
    "QRegExpValidator": "QRegularExpressionValidator",
    "QStringRef": "str",
    "QTextCodec": "str.encode",
    "QWebPage": "a page without it",
    "QWebView": "a page without it",
    "fromTime_t": "fromSecsSinceEpoch",
    "toTime_t": "toSecsSinceEpoch",
}
# their members moved between versions; plugin/host.py offers what both know
HOST_ONLY = {"QVariant", "QMetaType", "NULL"}


def broken_rules(text, name):
    """What would fail on some host version, in words.

    Parameters
    ----------
    text : str
        Source of a module.
    name : str
        What the module is called in the words.

    Returns
    -------
    list of str
    """
    tree = ast.parse(text)
    found = []
    for node in ast.walk(tree):
        found.extend(_gone(node))
        if not name.endswith("plugin/host.py"):
            found.extend(_versions(node))
    found.extend(f"{path}, unscoped: put its enum between" for path in _unscoped(tree))
    return [f"{name} uses {words}" for words in found]


def _gone(node):
    if isinstance(node, (ast.Import, ast.ImportFrom)):
        names = [alias.name for alias in node.names]
    elif isinstance(node, ast.Attribute):
        names = [node.attr]
    else:
        names = []
    return [f"{one}, which Qt 6 has not; write {GONE[one]}" for one in names if one in GONE]


def _versions(node):
    if not isinstance(node, ast.ImportFrom) or node.level:
        return []
    taken = [alias.name for alias in node.names if alias.name in HOST_ONLY]
    return [f"{one}; take it from plugin/host.py" for one in taken]


def _unscoped(tree):
    """Members of an enum that are taken from the class around it, as ``Class.Member``."""
    classes = {
        alias.asname or alias.name
        for node in ast.walk(tree)
        if isinstance(node, ast.ImportFrom) and (node.module or "").startswith("qgis.")
        for alias in node.names
        if alias.name.startswith("Q")
    }
    # what is gone on with or called is an enum or a class within the class
    whole = {id(node.value) for node in ast.walk(tree) if isinstance(node, ast.Attribute)}
    whole |= {id(node.func) for node in ast.walk(tree) if isinstance(node, ast.Call)}
    for node in ast.walk(tree):
        if (
            isinstance(node, ast.Attribute)
            and isinstance(node.value, ast.Name)
            and node.value.id in classes
            and id(node) not in whole
            and (node.value.id == "Qt" or node.attr[0].isupper())
            and not node.attr.isupper()
        ):
            yield f"{node.value.id}.{node.attr}"
