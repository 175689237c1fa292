"""The demo's files as package data: an invented theatre's talkback equalizer, and the bench of a rehearsal."""
