"""The two faces of Fadeline: the terminal app and the command line."""
