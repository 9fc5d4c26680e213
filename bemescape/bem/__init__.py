"""The boundary-element method: arrays in, arrays out; knows no cells and no units."""
