"""Everything about receive coils: noise, compression, calibration (maps), combination."""
