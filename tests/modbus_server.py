"""A Modbus instrument by an independent library, for tests/drivers_modbus.rs.

    modbus_server.py serial PATH BAUD | rtu-tcp PORT | tcp PORT

It is told what to hold by lines on its input and answers each with `done`:

    holding ADDRESS VALUE…   sets holding registers     input ADDRESS VALUE…   sets input registers
    exception CODE           answers with it; 0 ends    delay SECONDS          answers so late
    mute on|off              does not answer            flip on|off            sends a wrong check
    noise HEX                sends this before answers; `noise -` ends it
    as UNIT                  puts another unit into answers; `as 0` ends it
    asked                    prints the functions that were asked for, such as `3 4`
"""

import asyncio
import logging
import sys

from pymodbus.constants import ExcCodes
from pymodbus.framer import FramerType
from pymodbus.server import ModbusSerialServer, ModbusTcpServer
from pymodbus.simulator import DataType, SimData, SimDevice

UNIT = 1
REGISTERS = 20
logging.getLogger("pymodbus").setLevel(logging.CRITICAL)


class Instrument:
    def __init__(self, unit_at):
        self.unit_at = unit_at
        self.held = {3: [0] * REGISTERS, 4: [0] * REGISTERS}
        self.exception = 0
        self.delay = 0.0
        self.mute = self.flip = False
        self.noise = b""
        self.unit = 0
        self.asked = set()

    async def action(self, function, start, address, count, registers, writing):
        self.asked.add(function)
        if self.delay:
            await asyncio.sleep(self.delay)
        if self.exception:
            return ExcCodes(self.exception)
        if function in self.held:
            first = address - start
            registers[first : first + count] = self.held[function][address : address + count]
        return None

    def packet(self, sending, data):
        if not sending:
            return data
        # The library would answer for instruments that are not on the line.
        if self.mute or data[self.unit_at] not in (UNIT, self.unit):
            return b""
        if self.flip:
            data = data[:-1] + bytes([data[-1] ^ 0x40])
        return self.noise + data

    def pdu(self, sending, pdu):
        if sending and self.unit:
            pdu.dev_id = self.unit
        return pdu

    def told(self, line):
        word, *values = line.split()
        if word in ("holding", "input"):
            address, *values = map(int, values)
            self.held[3 if word == "holding" else 4][address : address + len(values)] = values
        elif word == "exception":
            self.exception = int(values[0])
        elif word == "delay":
            self.delay = float(values[0])
        elif word in ("mute", "flip"):
            setattr(self, word, values[0] == "on")
        elif word == "noise":
            self.noise = bytes.fromhex(values[0].strip("-"))
        elif word == "as":
            self.unit = int(values[0])
        elif word == "asked":
            return " ".join(map(str, sorted(self.asked)))
        else:
            raise SystemExit(f"unknown: {line}")
        return "done"


def server(instrument, how, where):
    bits = [SimData(0, count=16, values=False, datatype=DataType.BITS)]
    registers = [SimData(0, count=REGISTERS, values=0, datatype=DataType.REGISTERS)]
    device = SimDevice(UNIT, simdata=(bits, bits, registers, registers), action=instrument.action)
    hooks = {"trace_packet": instrument.packet, "trace_pdu": instrument.pdu, "ignore_missing_devices": True}
    if how == "serial":
        path, baud = where
        return ModbusSerialServer(device, framer=FramerType.RTU, port=path, baudrate=int(baud), **hooks)
    framer = FramerType.RTU if how == "rtu-tcp" else FramerType.SOCKET
    return ModbusTcpServer(device, framer=framer, address=("127.0.0.1", int(where[0])), **hooks)


async def main():
    instrument = Instrument(unit_at=6 if sys.argv[1] == "tcp" else 0)
    serving = server(instrument, sys.argv[1], sys.argv[2:])
    await serving.serve_forever(background=True)
    print("ready", flush=True)
    loop = asyncio.get_running_loop()
    while line := await loop.run_in_executor(None, sys.stdin.readline):
        print(instrument.told(line), flush=True)
    await serving.shutdown()


asyncio.run(main())
