"""What a run leaves behind: who it was, where it came from, and one verified file of measures."""
