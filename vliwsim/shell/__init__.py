"""Time both ways in one run of a kernel, and the reasons of what is seen there. Prints nothing: a face does."""
