"""Talks to the three simulated instruments through pyvisa with pyvisa-py, and prints what it saw as JSON.

Usage: pyvisa_client.py SCOPE LOAD SOURCE (VISA resource addresses)
"""

import json
import sys
import time

import pyvisa


def opened(manager, address):
    instrument = manager.open_resource(address, open_timeout=5000)
    instrument.read_termination = "\n"
    instrument.write_termination = "\n"
    instrument.timeout = 20000
    return instrument


def errors(instrument, out_of_range):
    """One unknown command, one value out of range: what the queue then holds, to its end."""
    instrument.write("NONSENSE 1")
    instrument.write(out_of_range)
    return [int(instrument.query("SYSTem:ERRor?").split(",")[0]) for _ in range(3)]


def seen(instrument, out_of_range, queries):
    return {
        "identity": instrument.query("*IDN?"),
        "errors": errors(instrument, out_of_range),
        "settings": [float(instrument.query(query)) for query in queries],
    }


def main():
    manager = pyvisa.ResourceManager("@py")
    scope, load, source = (opened(manager, address) for address in sys.argv[1:4])

    source.write("VOLTage 120;:FREQuency 60;:OUTPut ON")
    result = {"source": seen(source, "VOLTage 1000", ["VOLTage?", "FREQuency?", "OUTPut?"])}

    load.write("SYSTem:REMote;:CURRent:RANGe 3;:CURRent 0.25;:INPut ON")
    result["load"] = seen(load, "CURRent 100", ["CURRent?", "CURRent:RANGe?", "INPut?"])

    scope.write("CHANnel1:PROBe 100;SCALe 5;OFFSet 0;:ACQuire:POINts 100000;:TIMebase:SCALe 2US;:TRIGger:SWEep AUTO")
    scope.write("SINGle")
    while scope.query("ACQuire:COMPlete?") != "100":
        time.sleep(0.02)
    for form, datatype in (("BYTE", "B"), ("WORD", "H")):
        scope.write(f"WAVeform:FORMat {form}")
        codes = scope.query_binary_values("WAVeform:DATA?", datatype=datatype, is_big_endian=True, container=list)
        size = 1 if form == "BYTE" else 2
        result[form] = b"".join(code.to_bytes(size, "big") for code in codes).hex()
    blocks = {form: result.pop(form) for form in ("BYTE", "WORD")}
    # Of the memory, 20 us at 1 GS/s fill 20000 points.
    settings = ["TIMebase:SCALe?", "CHANnel1:SCALe?", "ACQuire:POINts?"]
    result["scope"] = seen(scope, "TIMebase:SCALe 100", settings) | blocks
    json.dump(result, sys.stdout)


main()
