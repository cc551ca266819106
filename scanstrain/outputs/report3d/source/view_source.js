// SPDX-License-Identifier: MIT
// Starts every view of the page. Where one cannot be drawn, its picture stays and a sentence says why.

import { readCloud } from "./cloud.js";
import { makeControls } from "./controls.js";
import { Drawing } from "./drawing.js";
import { Orbit } from "./orbit.js";

const NO_WEBGL = "The interactive view needs WebGL, which this browser does not offer";
const FAILED = "The interactive view could not be drawn in this browser";

async function start(host) {
    const scene = JSON.parse(host.querySelector("script[type='application/json']").textContent);
    const canvas = document.createElement("canvas");
    // asked for here, because a browser without it would make the library write errors to the console
    const context = canvas.getContext("webgl2", { alpha: true, antialias: false, powerPreference: "low-power" });
    if (!context) return excuse(host, NO_WEBGL);
    const cloud = await readCloud(scene);
    const drawing = new Drawing(canvas, context, cloud);
    const orbit = new Orbit(canvas, cloud, () => drawing.request());
    canvas.addEventListener("webglcontextlost", () => excuse(host, FAILED));
    const tool = makeControls(scene, cloud, drawing, orbit);
    host.append(tool);
    host.classList.add("cv-drawn");
    host.querySelector("figcaption").textContent = "";
    drawing.follow(orbit);
}

function excuse(host, reason) {
    const pictured = host.querySelector(".cv-picture img") !== null;
    host.classList.remove("cv-drawn");
    host.querySelector("figcaption").textContent = reason + (pictured ? "; the picture shows the same cloud." : ".");
}

for (const host of document.querySelectorAll(".cloud-view:not([data-started])")) {
    host.dataset.started = "";
    start(host).catch(() => excuse(host, FAILED));
}
