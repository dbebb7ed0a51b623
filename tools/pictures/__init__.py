"""The pictures and the shown output of the guides, made by the program itself."""
