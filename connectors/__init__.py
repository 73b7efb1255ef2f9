"""The outside world: OPC UA, files, memory. Every connector speaks :mod:`connectors.readings`."""
