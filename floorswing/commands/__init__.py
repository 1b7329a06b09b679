"""One module a command; each opens files, calls one function of the library, and prints."""
