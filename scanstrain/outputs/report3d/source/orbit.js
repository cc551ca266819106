// SPDX-License-Identifier: MIT
// Where the viewer stands, moved by mouse, touch and keyboard. Height is always up.

import { rangeOf } from "./cloud.js";
import { OPENING } from "./drawing.js";

const TURN_KEY = (5 * Math.PI) / 180; // angle of one press of an arrow key
const SHIFT_KEY = 0.06; // share of the view's height of one press of an arrow key with Shift
const ZOOM_KEY = 1.15; // ratio of distances of one press of + or -
const TURN_DRAG = 0.007; // angle of one pixel [rad]
const ZOOM_WHEEL = 0.0012; // logarithm of the ratio of distances of one unit of the wheel
const STEEPEST = 1.55; // just short of straight up and down [rad]
const FILLED = 0.94; // share of the canvas that the cloud fills at first
const CLICK = 5; // a pointer that moves less than this [pixels] clicks

export class Orbit {
    constructor(canvas, cloud, changed) {
        this.canvas = canvas;
        this.cloud = cloud;
        this.changed = changed;
        this.onPick = () => {};
        this.ready = false;
        this.pointers = new Map();
        this.#listen();
    }

    reset() {
        const { view } = this.cloud.scene;
        this.yaw = view.yaw;
        this.pitch = view.pitch;
        this.#fit();
        this.ready = true;
        this.changed();
    }

    // Aims at the middle of what is seen, from where all of it is in sight.
    #fit() {
        const { clientWidth: width, clientHeight: height } = this.canvas;
        const tall = Math.tan((OPENING * Math.PI) / 360) * FILLED;
        const wide = (tall * width) / Math.max(height, 1);
        const { right, up, back } = this.#axes();
        const sample = this.cloud.sample();
        const ends = [right, up, back].map((axis) => rangeOf(sample.map((point) => dot(point, axis))));
        const [r, u, b] = ends.map(([low, high]) => (low + high) / 2);
        this.target = [0, 1, 2].map((axis) => r * right[axis] + u * up[axis] + b * back[axis]);
        this.distance = 1e-3;
        for (const point of sample) {
            const away = Math.max(Math.abs(dot(point, right) - r) / wide, Math.abs(dot(point, up) - u) / tall);
            this.distance = Math.max(this.distance, dot(point, back) - b + away);
        }
    }

    #axes() {
        const [cy, sy, cp, sp] = [Math.cos(this.yaw), Math.sin(this.yaw), Math.cos(this.pitch), Math.sin(this.pitch)];
        return { back: [cy * cp, sy * cp, sp], right: [-sy, cy, 0], up: [-cy * sp, -sy * sp, cp] };
    }

    place(camera) {
        const { back } = this.#axes();
        const reach = Math.hypot(...this.cloud.size) + Math.hypot(...this.target.map((t, a) => t - this.cloud.size[a] / 2));
        camera.position.set(...this.target.map((middle, axis) => middle + this.distance * back[axis]));
        camera.near = Math.max(this.distance - reach, this.distance / 500, reach / 5000);
        camera.far = this.distance + reach;
        camera.updateProjectionMatrix();
        camera.lookAt(...this.target);
    }

    turn(yaw, pitch) {
        this.yaw += yaw;
        this.pitch = Math.min(Math.max(this.pitch + pitch, -STEEPEST), STEEPEST);
        this.changed();
    }

    zoom(ratio) {
        const whole = Math.hypot(...this.cloud.size);
        this.distance = Math.min(Math.max(this.distance * ratio, whole / 500), 6 * whole);
        this.changed();
    }

    // Moves the view by pixels to the right and downwards: what was under the pointer stays under it.
    shift(dx, dy) {
        const metres = (2 * this.distance * Math.tan((OPENING * Math.PI) / 360)) / this.canvas.clientHeight;
        const { right, up } = this.#axes();
        this.target = this.target.map((part, axis) => part - metres * (dx * right[axis] - dy * up[axis]));
        this.changed();
    }

    centreOn(i) {
        const { x, y, z, scene } = this.cloud;
        this.target = [x[i], y[i], z[i]].map((code) => code * scene.step);
        this.changed();
    }

    #listen() {
        const { canvas } = this;
        canvas.addEventListener("pointerdown", (event) => this.#down(event));
        canvas.addEventListener("pointermove", (event) => this.#move(event));
        for (const name of ["pointerup", "pointercancel"]) canvas.addEventListener(name, (event) => this.#up(event));
        canvas.addEventListener("contextmenu", (event) => event.preventDefault());
        // the wheel scrolls the page until the view has been chosen by a click or the Tab key
        canvas.addEventListener("wheel", (event) => {
            if (document.activeElement !== canvas) return;
            event.preventDefault();
            this.zoom(Math.exp(ZOOM_WHEEL * event.deltaY * (event.deltaMode ? 30 : 1)));
        }, { passive: false });
        canvas.addEventListener("keydown", (event) => this.#key(event));
    }

    #down(event) {
        this.canvas.classList.remove("cv-by-key");
        this.canvas.focus({ preventScroll: true });
        this.canvas.setPointerCapture(event.pointerId);
        this.pointers.set(event.pointerId, [event.clientX, event.clientY]);
        this.moved = this.pointers.size > 1 ? Infinity : 0;
    }

    #move(event) {
        const last = this.pointers.get(event.pointerId);
        if (!last) return;
        const [dx, dy] = [event.clientX - last[0], event.clientY - last[1]];
        this.moved += Math.hypot(dx, dy);
        const before = this.#spread();
        this.pointers.set(event.pointerId, [event.clientX, event.clientY]);
        if (this.moved < CLICK) return;
        if (this.pointers.size === 2) {
            this.zoom(before / this.#spread());
            this.shift(dx / 2, dy / 2);
        } else if (event.buttons & 2 || event.shiftKey || event.ctrlKey) this.shift(dx, dy);
        else this.turn(-TURN_DRAG * dx, TURN_DRAG * dy);
    }

    #up(event) {
        if (!this.pointers.delete(event.pointerId)) return;
        if (event.type === "pointerup" && event.button === 0 && this.moved < CLICK) {
            const box = this.canvas.getBoundingClientRect();
            this.onPick(event.clientX - box.left, event.clientY - box.top);
        }
    }

    // Distance of two fingers.
    #spread() {
        const [a, b] = [...this.pointers.values()];
        return b ? Math.max(Math.hypot(a[0] - b[0], a[1] - b[1]), 1) : 1;
    }

    #key(event) {
        this.canvas.classList.add("cv-by-key");
        if (event.ctrlKey || event.altKey || event.metaKey) return;
        const { clientWidth: width, clientHeight: height } = this.canvas;
        const arrows = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, 1], ArrowDown: [0, -1] };
        const arrow = arrows[event.key];
        if (arrow && event.shiftKey) this.shift(-arrow[0] * SHIFT_KEY * height, arrow[1] * SHIFT_KEY * height);
        else if (arrow) this.turn(arrow[0] * TURN_KEY, arrow[1] * TURN_KEY);
        else if (event.key === "+" || event.key === "=") this.zoom(1 / ZOOM_KEY);
        else if (event.key === "-" || event.key === "_") this.zoom(ZOOM_KEY);
        else if (event.key === "Home") this.reset();
        else if (event.key === "Enter" || event.key === " ") this.onPick(width / 2, height / 2);
        else if (event.key === "Escape") this.onPick(-1, -1);
        else return;
        event.preventDefault();
    }
}

function dot(a, b) {
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2];
}
