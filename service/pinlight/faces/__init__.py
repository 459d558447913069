"""Faces: the library call, the command, HTTP and the page. They read input, call, and show."""
