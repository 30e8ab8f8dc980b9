"""An MQTT subscriber that notes when each message arrived.

The stamp (CLOCK_MONOTONIC, ns) is the first thing done with a message; what it
means is worked out after the measurement. At SIGTERM the record is written, one
JSON array [ns, topic, payload] a line.
"""

import argparse
import json
import signal
import socket
import threading
import time

import paho.mqtt.client as mqtt


def main():
    a = argparse.ArgumentParser(description=__doc__)
    a.add_argument("--mqtt", required=True, help="host:port")
    a.add_argument("--topic", action="append", required=True)
    a.add_argument("--record", required=True)
    a = a.parse_args()
    heard, over = [], threading.Event()
    now = time.monotonic_ns

    def on_message(_client, _data, message):
        heard.append((now(), message.topic, message.payload))

    def on_connect(client, _data, _flags, reason, _properties):
        if reason.is_failure:
            raise SystemExit(f"hear: the broker refused: {reason}")
        client.subscribe([(topic, 1) for topic in a.topic])

    client = mqtt.Client(mqtt.CallbackAPIVersion.VERSION2)
    # Acknowledgements must not wait for company: that would slow the sender.
    client.on_socket_open = lambda _c, _d, s: s.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    client.on_connect, client.on_message = on_connect, on_message
    client.on_subscribe = lambda *_: print("ready", flush=True)
    for s in (signal.SIGTERM, signal.SIGINT):
        signal.signal(s, lambda *_: over.set())
    host, port = a.mqtt.rsplit(":", 1)
    client.connect(host, int(port))
    client.loop_start()
    while not over.wait(0.2):
        pass
    client.loop_stop()
    with open(a.record, "w", encoding="utf-8") as out:
        for ns, topic, payload in heard:
            out.write(json.dumps([ns, topic, payload.decode("utf-8", "replace")]) + "\n")
    print(json.dumps({"messages": len(heard)}), flush=True)


if __name__ == "__main__":
    main()
