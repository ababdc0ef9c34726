"""Energies only, no kinetics: arrays in, arrays out; nothing here knows a file, a system or a rate constant."""
