"""A model of an analogue chain: a picture in, a frame with known truth out."""
