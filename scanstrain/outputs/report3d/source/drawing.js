// SPDX-License-Identifier: MIT
// The points on the canvas: drawn when something changed, cut by the sliders, found under the pointer.

import {
    BufferAttribute, BufferGeometry, PerspectiveCamera, Points, Scene, ShaderMaterial, Vector3, WebGLRenderer,
} from "three";
import { Edges } from "./edges.js";

export const OPENING = 40; // vertical angle of view [degrees]
const NEAR_ENOUGH = 7; // a click finds what is drawn within this many pixels
const SMALLEST = 1.6; // a point is at least this wide [pixels]
const UNKNOWN = -1000000000; // stands for no chainage: such a point is not cut away by it
const LARGEST = 48; // and at most this wide, when the viewer is very near

// Colours pass unchanged, so that they are those of the colour key; depth comes from size and from what hides what.
const VERTEX = `
attribute vec4 tint;
attribute vec4 facing;
attribute float along;
uniform float step, diameter, pixels, hollow;
uniform vec4 clip;
varying vec3 shown;
void main() {
    vec3 place = position * step;
    vec4 seen = modelViewMatrix * vec4(place, 1.0);
    gl_Position = projectionMatrix * seen;
    gl_PointSize = clamp(diameter * pixels / -seen.z, ${SMALLEST.toFixed(1)}, ${LARGEST.toFixed(1)});
    bool cut = along > ${UNKNOWN}.0 && (along < clip.x || along > clip.y) || place.z < clip.z || place.z > clip.w;
    bool away = hollow > 0.5 && dot(facing.xyz, cameraPosition - place) < 0.0;
    if (cut || away) gl_Position = vec4(2.0, 2.0, 2.0, 1.0);
    shown = tint.rgb;
}`;
const FRAGMENT = `
varying vec3 shown;
void main() {
    vec2 off = gl_PointCoord - 0.5;
    if (dot(off, off) > 0.25) discard;
    gl_FragColor = vec4(shown, 1.0);
}`;

export class Drawing {
    constructor(canvas, context, cloud) {
        this.canvas = canvas;
        this.cloud = cloud;
        this.onDraw = () => {};
        this.renderer = new WebGLRenderer({ canvas, context, alpha: true, antialias: false });
        this.renderer.setClearColor(0x000000, 0); // the ground is the page's
        this.renderer.debug.onShaderError = () => {
            throw new Error("this graphics driver refuses the drawing");
        };
        this.edges = new Edges(this.renderer);
        this.camera = new PerspectiveCamera(OPENING, 1, 0.1, 100);
        this.camera.up.set(0, 0, 1);
        this.material = new ShaderMaterial({
            vertexShader: VERTEX,
            fragmentShader: FRAGMENT,
            uniforms: {
                step: { value: cloud.scene.step },
                diameter: { value: cloud.spacing },
                pixels: { value: 1 },
                hollow: { value: cloud.scene.view.hollow ? 1 : 0 },
                clip: { value: [-Infinity, Infinity, -Infinity, Infinity] },
            },
        });
        this.points = new Points(this.#geometry(), this.material);
        this.points.frustumCulled = false;
        this.world = new Scene();
        this.world.add(this.points);
        this.setClip("along", cloud.alongRange);
        this.setClip("height", cloud.heightRange);
    }

    #geometry() {
        const { cloud } = this;
        const geometry = new BufferGeometry();
        geometry.setAttribute("position", new BufferAttribute(cloud.position, 3));
        geometry.setAttribute("facing", new BufferAttribute(cloud.normal, 4));
        const along = cloud.alongMetres.map((metres) => (Number.isNaN(metres) ? UNKNOWN : metres));
        geometry.setAttribute("along", new BufferAttribute(along, 1));
        this.tint = new BufferAttribute(new Uint8Array(4 * cloud.count), 4, true);
        geometry.setAttribute("tint", this.tint);
        return geometry;
    }

    follow(orbit) {
        this.orbit = orbit;
        new ResizeObserver(() => this.#resize()).observe(this.canvas);
        this.#resize();
        orbit.reset();
        // at once, so that a drawing that fails is known before the picture is taken away for good
        this.#draw();
    }

    #resize() {
        const { clientWidth: width, clientHeight: height } = this.canvas;
        if (!width || !height) return;
        const ratio = Math.min(window.devicePixelRatio || 1, 2);
        this.renderer.setPixelRatio(ratio);
        this.renderer.setSize(width, height, false);
        this.edges.resize(width, height, ratio);
        this.camera.aspect = width / height;
        this.material.uniforms.pixels.value = (ratio * height) / (2 * Math.tan((OPENING * Math.PI) / 360));
        // now, since a canvas of a new size is empty until it is drawn on
        if (this.orbit.ready) this.#draw();
    }

    request() {
        if (this.waiting) return;
        this.waiting = true;
        requestAnimationFrame(() => {
            this.waiting = false;
            this.#draw();
        });
    }

    #draw() {
        this.orbit.place(this.camera);
        this.edges.draw(this.world, this.camera, this.material.uniforms.diameter.value);
        this.onDraw();
    }

    paint(layer, onlySignificant) {
        this.cloud.paint(layer, onlySignificant, this.tint.array);
        this.tint.needsUpdate = true;
        this.request();
    }

    setClip(which, [from, to]) {
        const { clip } = this.material.uniforms;
        const lowest = which === "height" ? this.cloud.heightRange[0] : 0;
        const slack = 1e-3; // the ends are part of what is shown, whatever the rounding
        clip.value[which === "height" ? 2 : 0] = from - lowest - slack;
        clip.value[which === "height" ? 3 : 1] = to - lowest + slack;
        this.request();
    }

    setSize(factor) {
        this.material.uniforms.diameter.value = factor * this.cloud.spacing;
        this.request();
    }

    setHollow(on) {
        this.material.uniforms.hollow.value = on ? 1 : 0;
        this.request();
    }

    // Where a point is on the canvas [CSS pixels], or null where it is behind the viewer.
    project(i) {
        const { cloud, camera, canvas } = this;
        const { step } = cloud.scene;
        const at = new Vector3(cloud.x[i] * step, cloud.y[i] * step, cloud.z[i] * step).project(camera);
        if (at.z > 1) return null;
        return [((at.x + 1) / 2) * canvas.clientWidth, ((1 - at.y) / 2) * canvas.clientHeight];
    }

    isShown(i) {
        const { cloud, material, camera } = this;
        const { clip, hollow } = material.uniforms;
        const { step } = cloud.scene;
        const [x, y, z] = [cloud.x[i] * step, cloud.y[i] * step, cloud.z[i] * step];
        const along = this.points.geometry.attributes.along.array[i];
        if (along > UNKNOWN && (along < clip.value[0] || along > clip.value[1])) return false;
        if (z < clip.value[2] || z > clip.value[3]) return false;
        if (!hollow.value) return true;
        const [nx, ny, nz] = cloud.normal.subarray(4 * i, 4 * i + 3);
        const eye = camera.position;
        return nx * (eye.x - x) + ny * (eye.y - y) + nz * (eye.z - z) >= 0;
    }

    // The point drawn under a place of the canvas [CSS pixels], or -1: the nearest to it on the front surface.
    pick(px, py) {
        this.orbit.place(this.camera);
        this.camera.updateMatrixWorld();
        const found = this.#under(px, py);
        if (!found.length) return -1;
        const front = Math.min(...found.map((each) => each.depth));
        const same = found.filter((each) => each.depth < front + 4 * this.cloud.spacing);
        return same.reduce((best, each) => (each.off < best.off ? each : best)).i;
    }

    #under(px, py) {
        const { cloud, camera, canvas } = this;
        const { step } = cloud.scene;
        const m = camera.projectionMatrix.clone().multiply(camera.matrixWorldInverse).elements;
        const [w, h] = [canvas.clientWidth / 2, canvas.clientHeight / 2];
        const found = [];
        for (let i = 0; i < cloud.count; i++) {
            const [x, y, z] = [cloud.x[i] * step, cloud.y[i] * step, cloud.z[i] * step];
            const depth = m[3] * x + m[7] * y + m[11] * z + m[15];
            if (depth <= 0) continue;
            const dx = ((m[0] * x + m[4] * y + m[8] * z + m[12]) / depth + 1) * w - px;
            if (Math.abs(dx) > NEAR_ENOUGH) continue;
            const dy = (1 - (m[1] * x + m[5] * y + m[9] * z + m[13]) / depth) * h - py;
            const off = Math.hypot(dx, dy);
            if (off <= NEAR_ENOUGH && this.isShown(i)) found.push({ i, off, depth });
        }
        return found;
    }
}
