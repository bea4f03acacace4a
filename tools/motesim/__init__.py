"""motesim: laser dust sensors emulated by a physical model.

aerosol, humidity, settling, relaxation     the physics, no state
weather, events, air                        what the sensors breathe: courses in time, and the truth
optics, flow, firmware, unit, faults        one sensor, part by part
emulator                                    one sensor in numbers; line: in bytes; live: under commands
plan, table, scenario                       what is asked for
site, capture                               as fast as it goes; port, control, run: in real time
"""
