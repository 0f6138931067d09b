"""The wedgewright command: a thin skin over the library."""
