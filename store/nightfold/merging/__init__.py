"""One machine under two names: all that is stored under the one becomes the other's."""
