"""
A client program that loads a service over loopback: `python -m tests.benchmarks.load URL KEY SECONDS CLIENTS REQUEST…`.

Each client keeps one connection and sends the next request when the last is answered; client i sends request i modulo
their number. A request is JSON: method, path, headers, body. Prints one line of JSON: requests, seconds, the median and
99 % latency in milliseconds, and how often each status came.
"""

import asyncio
import json
import sys
import time
from collections import Counter
from typing import Any
from urllib.parse import urlsplit


def encoded(host: str, key: str, request: dict[str, Any]) -> bytes:
    body = str(request.get("body", "")).encode()
    lines = [
        f"{request['method']} {request['path']} HTTP/1.1",
        f"Host: {host}",
        f"Authorization: Bearer {key}",
        *(f"{name}: {value}" for name, value in request.get("headers", {}).items()),
    ]
    if body:
        lines += ["Content-Type: application/json", f"Content-Length: {len(body)}"]
    return "\r\n".join([*lines, "", ""]).encode() + body


async def answered(reader: asyncio.StreamReader) -> int:
    head = (await reader.readuntil(b"\r\n\r\n")).lower()
    status = int(head[9:12])
    at = head.find(b"content-length:")
    if at >= 0:
        await reader.readexactly(int(head[at + 15 : head.index(b"\r\n", at)]))
    return status


async def client(host: str, port: int, wire: bytes, until: float, spent: list[float], statuses: Counter[int]) -> None:
    reader, writer = await asyncio.open_connection(host, port)
    while time.perf_counter() < until:
        start = time.perf_counter()
        writer.write(wire)
        statuses[await answered(reader)] += 1
        spent.append(time.perf_counter() - start)
    writer.close()


async def main(url: str, key: str, seconds: float, clients: int, requests: list[dict[str, Any]]) -> dict[str, Any]:
    place = urlsplit(url)
    host, port = place.hostname or "127.0.0.1", place.port or 80
    wires = [encoded(f"{host}:{port}", key, request) for request in requests]
    spent: list[float] = []
    statuses: Counter[int] = Counter()
    start = time.perf_counter()
    until = start + seconds
    await asyncio.gather(*(client(host, port, wires[i % len(wires)], until, spent, statuses) for i in range(clients)))
    took = time.perf_counter() - start
    spent.sort()
    return {
        "requests": len(spent),
        "seconds": took,
        "median_ms": 1000 * spent[len(spent) // 2],
        "p99_ms": 1000 * spent[int(0.99 * len(spent))],
        "statuses": statuses,
    }


if __name__ == "__main__":
    _, url_, key_, seconds_, clients_, *requests_ = sys.argv
    answer = asyncio.run(main(url_, key_, float(seconds_), int(clients_), [json.loads(r) for r in requests_]))
    print(json.dumps(answer))
