"""The words of MQTT Sparkplug B, for the source that reads them and the invented plant that speaks them.

Only the wire format is shared: the messages made from `payload.proto`, data types and topics. How values are
read and how they are written stand apart, each on its own side.
"""
