"""The soft PLC in a process of its own, on real links, against a rig whose image a test drives."""

from __future__ import annotations

import multiprocessing
import os
import signal
import socket
import sys

import numpy as np
import pytest

from harness.domain.points import points_of
from harness.domain.rig import Encoding, ModbusServerLink, OpcUaServerLink, RegisterItem
from harness.runtime.clock import PacedClock
from harness.runtime.link_process import LinkProcess
from harness.runtime.soft_plc_process import run_soft_plc_blocking

pytestmark = pytest.mark.wire

PACE = 60.0


def free_port():
    with socket.create_server(("127.0.0.1", 0)) as server:
        return server.getsockname()[1]


def modbus_link(points, port):
    encodings = {"TICK": Encoding.UINT32}
    items = tuple(
        RegisterItem(
            point=point.name,
            address=2 * number,
            encoding=encodings.get(point.name, Encoding.FLOAT32),
        )
        for number, point in enumerate(points)
    )
    return ModbusServerLink(name="modbus", host="127.0.0.1", port=port, unit=1, items=items)


class HandRig:
    """A rig without a plant: the test sets the points, writes go straight into the image."""

    def __init__(self, rig, link):
        self.points = points_of(rig, external=True)
        self.names = [point.name for point in self.points]
        self.link = link
        self.clock = PacedClock()
        self.values = {
            "LT-2": 0.75, "LIC-2.SP": 0.75, "LIC-2.MODE": 0.0, "LIC-2.MO": 40.0,
            "LIC-2.KC": 2.0, "LIC-2.TI": 20.0, "FV-1": 55.0, "LIC-2.HB": 0.0,
        }  # fmt: skip
        self.outputs = []
        self.beats = []
        self.tick = 0
        self.process = None
        self.controller = None  # watched while it has to be there

    def start(self):
        self.process = LinkProcess([self.link], self.points, "hand rig")
        self.process.start()

    def step(self):
        """Do one tick of 0.5 plant seconds at the pace."""
        self.clock.wait_until(self.clock.now_ns() + int(0.5e9 / PACE))
        for request in self.process.drain().writes:
            for exchange in request:
                self.values[exchange.point] = exchange.value
                if exchange.point == "FV-1":
                    self.outputs.append(exchange.value)
                elif exchange.point == "LIC-2.HB":
                    self.beats.append(exchange.value)
        self.tick += 1
        image = np.array([self.values.get(name, 0.0) for name in self.names])
        image[self.names.index("TICK")] = self.tick
        self.process.publish(
            self.tick, image, np.full(len(image), np.nan), np.zeros(len(image))
        )

    def step_until(self, enough):
        """Tick until it is so; the test's own time limit ends it."""
        while not enough():
            self.step()
            assert self.controller is None or self.controller.process.is_alive()


class Controller:
    """The soft PLC in a process of its own."""

    def __init__(self, rig, link):
        context = multiprocessing.get_context("spawn")
        self.queue = context.SimpleQueue()
        self.process = context.Process(
            target=run_soft_plc_blocking, args=(rig, link, "LIC-2", PACE, self.queue.put)
        )
        self.process.start()
        self.lines = []

    def said(self, text):
        while not self.queue.empty():
            self.lines.append(self.queue.get())
        return any(text in line for line in self.lines)

    def end(self):
        if self.process.is_alive():
            self.process.kill()
        self.process.join()


@pytest.fixture(params=["modbus", pytest.param("opcua", marks=pytest.mark.slow)])
def pair(request, two_tanks):
    port = free_port()
    points = points_of(two_tanks(), external=True)
    if request.param == "modbus":
        link = modbus_link(points, port)
    else:
        link = OpcUaServerLink(name="opcua", host="127.0.0.1", port=port)
    rig = two_tanks(links=(link,))
    hand_rig = HandRig(rig, link)
    hand_rig.start()
    hand_rig.step()
    controller = hand_rig.controller = Controller(rig, request.param)
    yield hand_rig, controller
    controller.end()
    hand_rig.process.stop()


def take_over_and_follow_orders(rig, controller):
    rig.step_until(lambda: rig.outputs)
    assert controller.said("takes over FV-1 at 55.0 %")
    rig.step_until(lambda: 40.0 in rig.outputs)  # manual: the ordered output


def close_the_loop(rig):
    rig.values["LIC-2.MODE"] = 1.0
    before = len(rig.outputs)
    rig.step_until(lambda: len(rig.outputs) > before + 5)
    assert rig.outputs[-3:] == pytest.approx([40.0] * 3, abs=1e-4)  # bumpless, no error

    # An integrating vessel: filled by what the valve gives over 50 %.
    def settled():
        rig.values["LT-2"] += 2e-4 * (rig.values["FV-1"] - 50.0)
        return abs(rig.values["LT-2"] - 0.90) < 0.002 and abs(rig.values["FV-1"] - 50.0) < 1.0

    rig.values["LIC-2.SP"] = 0.90
    rig.step_until(settled)
    # a heartbeat for each scan, and no write lost on the way
    assert np.diff(rig.beats).tolist() == [1.0] * (len(rig.beats) - 1)


def restart_the_rig(rig, controller):
    rig.process.stop()
    while not controller.said("link lost, output held"):
        rig.clock.wait_until(rig.clock.now_ns() + 10_000_000)
    rig.tick = 0
    rig.values |= {"FV-1": 20.0, "LT-2": rig.values["LIC-2.SP"]}
    rig.outputs.clear()
    rig.start()
    rig.step_until(lambda: rig.outputs)
    assert rig.outputs[0] == pytest.approx(20.0, abs=1e-4)  # it takes over again
    rig.step_until(lambda: controller.said("link back"))
    assert controller.said("the rig began anew")


@pytest.mark.timeout(120)  # three OPC UA starts, seconds each on a busy machine
def test_it_closes_the_loop_survives_a_restart_and_ends_when_told(pair):
    """One story, because each start of the processes costs seconds."""
    rig, controller = pair
    take_over_and_follow_orders(rig, controller)
    close_the_loop(rig)
    restart_the_rig(rig, controller)
    if sys.platform != "win32":  # a process cannot be asked to end there
        rig.controller = None
        os.kill(controller.process.pid, signal.SIGTERM)
        rig.step_until(lambda: not controller.process.is_alive())
        assert controller.process.exitcode == 0
        assert controller.said("stopped after")


@pytest.mark.skipif(sys.platform == "win32", reason="there is no SIGINT for one process")
@pytest.mark.parametrize("pair", ["modbus"], indirect=True)
def test_ctrl_c_ends_it_even_while_it_waits_for_the_rig(pair):
    rig, controller = pair
    rig.process.stop()
    while not (controller.said("waiting for the rig") or controller.said("link lost")):
        rig.clock.wait_until(rig.clock.now_ns() + 10_000_000)
    os.kill(controller.process.pid, signal.SIGINT)
    controller.process.join(10.0)
    assert controller.process.exitcode == 0
