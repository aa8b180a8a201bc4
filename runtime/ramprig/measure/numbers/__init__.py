"""The arithmetic of measuring: fits, uncertainties and motor equations. Pure: no device, no file, no clock."""
