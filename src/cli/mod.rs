//! Layer 6, the command line of the binary: arguments, settings, commands, messages.  May use: the public library.
