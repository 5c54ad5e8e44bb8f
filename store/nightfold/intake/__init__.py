"""Readers: files of shot records become a stream of `Incoming`, one a record, with where it stood."""
