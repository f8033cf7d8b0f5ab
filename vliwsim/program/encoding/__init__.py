"""Words: their layout on a core, the encoder, the decoder, and the image file."""
