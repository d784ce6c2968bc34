"""The log: what joins link and journal while recording, and what is made of a journal afterwards."""
