"""The time from an NTP server: one question, one answer, checked. Source: RFC 4330 (SNTP), RFC 5905."""

import os
import socket
import struct

_SINCE_1900 = 2208988800  # s from 1900 to 1970


def ask(host, port=123, timeout_s=3):
    """The time [s since 1970, UTC]. OSError where there is no answer, or none that may be believed."""
    question = bytearray(48)
    question[0] = 0x23  # version 4, client
    question[40:48] = mark = os.urandom(8)  # the answer must carry it back
    s = socket.socket(socket.AF_INET, socket.SOCK_DGRAM)
    try:
        s.settimeout(timeout_s)
        s.sendto(question, socket.getaddrinfo(host, port)[0][-1])
        answer = s.recv(48)
    finally:
        s.close()
    if len(answer) < 48 or answer[24:32] != mark:
        raise OSError("ntp: not an answer to this question")
    if answer[0] & 7 != 4 or answer[0] >> 6 == 3 or not 0 < answer[1] < 16:  # mode server, clock set, stratum
        raise OSError("ntp: the server does not know the time")
    since, part = struct.unpack(">II", answer[40:48])
    since += part >> 31  # to the nearest second
    return since - _SINCE_1900 + (0 if since >> 31 else 1 << 32)  # the count began anew in 2036
