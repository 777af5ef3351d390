"""The pure part: no clock, file, socket, thread, log or chance. Time comes in with the input."""
