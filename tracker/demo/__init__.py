"""An invented utility that writes its files as a real one would."""
