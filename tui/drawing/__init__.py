"""Drawing as pure functions: values and a width in, rows of text with roles out. No widget, no colour, no clock."""
