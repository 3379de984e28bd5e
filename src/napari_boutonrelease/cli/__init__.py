"""The command line: one file a command, thin over the library, and quick to start."""
