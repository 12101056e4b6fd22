"""Drivers of sensors and converters, from their data sheets' register tables; each works on any object with machine.I2C's methods."""
