"""How sample and instrument turn atoms into channels: tube, sample, scatter, detector, pile-up."""
