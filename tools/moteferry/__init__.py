"""moteferry: the operator's companion of motekeep. Fits, rehearses, signs and rolls calibration documents.

`fit/` record pairs to a document; `rehearsal`, `signing` one document before it travels; `roll/` many documents to many
gateways over MQTT. Nothing of this package runs on a device.
"""
