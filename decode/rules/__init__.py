"""The rules that are tables: kinds of finding and measurements, read by the code, the messages and the docs alike."""
