"""The numeric core: numpy, scipy and shapely over arrays; never the host application."""
