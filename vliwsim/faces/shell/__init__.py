"""The shell as a person sees it: commands, answers as lines, drawing, and the prompt."""
