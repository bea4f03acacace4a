"""motesim: sensor emulator and aerosol model."""
