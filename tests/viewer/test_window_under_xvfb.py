"""The window: opens on a virtual screen, obeys keys and sliders; says what to do where there is no screen."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from PIL import Image

from planum.errors import MachineError, Problem
from planum.viewer import window

SESSION = """
import sys
from pathlib import Path
import numpy as np
import xarray as xr
from planum.scene.build import build_scene
from planum.viewer.control import Controller
from planum.viewer.window import Window, check_screen

folder = Path(sys.argv[1])
check_screen()
slices = xr.open_dataset(folder / "slices.nc", engine="h5netcdf")
lines = [(str(i), np.array([[512340.0, 5398121.0 + i], [512356.0, 5398121.0 + i]])) for i in range(8)]
control = Controller(build_scene(slices, lines=lines, slice_depth=0.3))
window = Window(control, pictures=folder, size=(900, 600), picture_size=(160, 110))
window.connect()
plotter = window.plotter
plotter.show(auto_close=False, interactive=False, interactive_update=True)
keyboard = plotter.iren.interactor

def press(name):
    keyboard.SetKeySym(name)
    keyboard.SetKeyCode(name if len(name) == 1 else chr(0))
    keyboard.InvokeEvent("KeyPressEvent")
    keyboard.InvokeEvent("CharEvent")

def slide(name, value):
    slider = window._sliders[name]
    slider.GetRepresentation().SetValue(value)
    slider.InvokeEvent("EndInteractionEvent")

def shot(name):
    plotter.screenshot(folder / f"{name}.png")

assert control.scene.index == 2, "opening moved the slice"
shot("opened")
for _ in range(5):
    press("Down")
assert control.scene.index == 7, control.scene.index
assert abs(window._sliders["depth"].GetRepresentation().GetValue() - control.scene.depth_m) < 1e-6
press("i")
shot("deeper")
press("Up")
assert control.scene.index == 6
press("l")
assert not control.lines and "lines" not in plotter.actors
press("L")
assert control.lines and "lines" in plotter.actors
press("I")
assert plotter.actors["isosurface"].prop.style.lower() == "surface"
slide("level", 0.9)
assert abs(control.scene.level - 0.9) < 1e-6
slide("depth", 1.0)
assert abs(control.scene.depth_m - 1.0) < 1e-6
press("h")
shot("help")
where = np.array(plotter.camera.position)
plotter.camera.zoom(2.0)
plotter.camera.azimuth += 40
press("Home")
assert np.allclose(plotter.camera.position, where) and plotter.camera.view_angle == 24.0
press("s")
press("s")
assert "written" in control.message, control.message
assert all(a.prop.style.lower() == "surface" for n, a in plotter.actors.items() if n == "isosurface")
plotter.close()
"""

CLOSING = """
import sys
from pathlib import Path
import xarray as xr
from planum.viewer import window

connect = window.Window.connect

def connect_and_leave(self):
    connect(self)
    keyboard = self.plotter.iren.interactor

    def leave(step):
        keyboard.SetKeySym("q")
        keyboard.SetKeyCode("q")
        keyboard.InvokeEvent("KeyPressEvent")

    self.plotter.add_timer_event(max_steps=1, duration=200, callback=leave)

window.Window.connect = connect_and_leave
window.rendering_problem = lambda: None  # asked in the other test
slices = xr.open_dataset(Path(sys.argv[1]) / "slices.nc", engine="h5netcdf")
window.open_window(slices, slice_depth=0.8)
sys.stdout.write("closed")
"""


def test_without_a_screen_the_error_names_the_other_way(ring: xr.Dataset, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "platform", "linux")
    monkeypatch.delenv("DISPLAY", raising=False)
    with pytest.raises(MachineError, match=r"DISPLAY is not set; .*--picture FILE"):
        window.open_window(ring)


def test_a_machine_that_cannot_draw_is_told_before_a_window_opens(
    ring: xr.Dataset, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("DISPLAY", ":1")
    monkeypatch.setattr(window, "rendering_problem", lambda: Problem(came="nothing can be drawn", do="install libegl1"))
    with pytest.raises(MachineError, match="install libegl1"):
        window.open_window(ring)


def under_xvfb(code: str, folder: Path) -> subprocess.CompletedProcess[str]:
    command = ["xvfb-run", "-a", sys.executable, "-c", code, str(folder)]
    return subprocess.run(command, capture_output=True, text=True, timeout=240, check=False)


@pytest.mark.system("xvfb-run")
def test_the_window_stays_open_until_it_is_closed(ring: xr.Dataset, tmp_path: Path) -> None:
    """Left to itself it would wait for ever: only the key ends it before the time limit."""
    ring.to_netcdf(tmp_path / "slices.nc", engine="h5netcdf")
    done = under_xvfb(CLOSING, tmp_path)
    assert (done.returncode, done.stdout) == (0, "closed"), done.stderr[-2000:]


@pytest.mark.system("xvfb-run")
def test_the_window_obeys_keys_and_sliders(ring: xr.Dataset, tmp_path: Path) -> None:
    ring.to_netcdf(tmp_path / "slices.nc", engine="h5netcdf")
    done = under_xvfb(SESSION, tmp_path)
    assert done.returncode == 0, done.stderr[-2000:]
    opened, deeper, helped = (
        np.asarray(Image.open(tmp_path / f"{name}.png").convert("RGB")).astype(int)
        for name in ("opened", "deeper", "help")
    )
    assert opened.shape == (600, 900, 3)
    assert opened.std() > 10  # a blank window has 0
    warm = [(p[..., 0] - p[..., 2] > 60).sum() for p in (opened, deeper)]
    assert warm[0] > 2000  # wall and pipe cover far more than the coloured text
    assert warm[1] < warm[0] / 2  # switched off
    block = (slice(150, 450), slice(200, 700))
    dark = [(p[block].max(axis=-1) < 60).sum() for p in (opened, deeper)]
    assert dark[1] > 2 * dark[0]  # at 0.8 m the slice runs through the wall, at 0.3 m it does not
    assert np.abs(helped - deeper)[60:140, 720:].sum() > 10_000  # the list of keys
    pictures = sorted(p.name for p in tmp_path.glob("MBF1_*.png"))
    assert pictures == ["MBF1_d095-105cm_1.png", "MBF1_d095-105cm_2.png"]
