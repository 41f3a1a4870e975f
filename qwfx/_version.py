"""The version of the package (not of the file format, which is `qwfx.model.FORMAT_VERSION`)."""

__version__ = "0.1.0"
