"""The prototype lowpass: the object, one file per design method, length estimates."""
