"""Analysis -> pictures, text and the page; never a look inside a stage's algorithm."""
