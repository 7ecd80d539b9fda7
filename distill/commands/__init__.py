"""The commands, one a file: its flags, and the call of the function that does the work; floor 7."""
