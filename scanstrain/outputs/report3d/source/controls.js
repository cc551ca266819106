// SPDX-License-Identifier: MIT
// What surrounds the canvas: choice of the attribute, colour key, sliders, and the panel with the values of a point.

import { key } from "./key.js";
import { emptyPanel, filledPanel } from "./panel.js";
import { make } from "./parts.js";
import { span, slider } from "./sliders.js";
import { number } from "./words.js";

const SIZE = { min: 0.5, max: 4, step: 0.25, start: 2 };
const HELP = [
    ["drag", "turn"],
    ["right button, Shift + drag, two fingers", "move"],
    ["wheel after a click, pinch", "zoom"],
    ["click", "read a point"],
    ["arrow keys", "turn; with Shift: move"],
    ["+ and \u2212", "zoom"],
    ["Enter", "read the point under the cross"],
    ["Escape", "clear the reading"],
    ["Home", "back to the start"],
];

export function makeControls(scene, cloud, drawing, orbit) {
    const { canvas } = drawing;
    const state = { layer: cloud.layers[0], only: scene.onlySignificant, picked: -1, missed: false };
    canvas.className = "cv-canvas";
    canvas.tabIndex = 0;
    canvas.setAttribute("role", "application");
    const legend = make("div", { className: "cv-key" });
    const { ring, panel, read } = makeReading(cloud, drawing, orbit, state);
    const repaint = () => {
        drawing.paint(state.layer, state.only);
        legend.replaceChildren(...key(state.layer, scene, state.only));
        canvas.setAttribute("aria-label", `Cloud coloured by ${state.layer.title}, ${scene.epochs}. `
            + "Arrow keys turn, plus and minus zoom, Enter reads the point under the cross.");
        read();
    };
    repaint();
    return make("div", { className: "cv-tool" }, [
        make("div", { className: "cv-top" }, [
            chooser(cloud, state, repaint),
            tick("Grey where nothing significant changed", state.only, (on) => {
                state.only = on;
                repaint();
            }),
            tick("See through surfaces from behind", scene.view.hollow, (on) => drawing.setHollow(on)),
        ]),
        make("div", { className: "cv-stage" }, [canvas, make("span", { className: "cv-cross" }), ring]),
        legend,
        make("div", { className: "cv-side" }, [panel, note(scene)]),
        sliders(scene, cloud, drawing, orbit),
        help(),
    ]);
}

// The point that was picked: its values in the panel, and a ring around it.
function makeReading(cloud, drawing, orbit, state) {
    const ring = make("span", { className: "cv-ring", hidden: true });
    const panel = make("div", { className: "cv-panel", role: "status" });
    const mark = () => {
        const at = state.picked >= 0 && drawing.isShown(state.picked) ? drawing.project(state.picked) : null;
        ring.hidden = !at;
        if (at) ring.style.transform = `translate(${at[0].toFixed(1)}px, ${at[1].toFixed(1)}px)`;
    };
    const actions = {
        centre: () => orbit.centreOn(state.picked),
        clear: () => {
            orbit.onPick(-1, -1);
            drawing.canvas.focus({ preventScroll: true });
        },
    };
    const read = () => {
        panel.replaceChildren(...(state.picked < 0 ? emptyPanel(state.missed) : filledPanel(cloud, state, actions)));
        mark();
    };
    drawing.onDraw = mark;
    orbit.onPick = (px, py) => {
        state.picked = px < 0 ? -1 : drawing.pick(px, py);
        state.missed = px >= 0 && state.picked < 0;
        read();
    };
    return { ring, panel, read };
}

function chooser(cloud, state, repaint) {
    const select = make("select", {}, cloud.layers.map((layer, at) => make("option", { value: String(at) }, [layer.title])));
    select.addEventListener("change", () => {
        state.layer = cloud.layers[Number(select.value)];
        repaint();
    });
    return make("label", { className: "cv-choice" }, [make("span", {}, ["Colour by"]), select]);
}

function tick(words, on, changed) {
    const box = make("input", { type: "checkbox", checked: on });
    box.addEventListener("change", () => changed(box.checked));
    return make("label", { className: "cv-tick" }, [box, words]);
}

function sliders(scene, cloud, drawing, orbit) {
    const along = span(scene.along.name, cloud.alongRange, (range) => drawing.setClip("along", range));
    const height = span("height", cloud.heightRange, (range) => drawing.setClip("height", range));
    const size = slider("point size", SIZE, (value) => drawing.setSize(value));
    const reset = make("button", { type: "button", className: "cv-button" }, ["Reset the view"]);
    reset.addEventListener("click", () => {
        for (const each of [along, height, size]) each.reset();
        orbit.reset();
    });
    drawing.setSize(SIZE.start);
    return make("div", { className: "cv-bottom" }, [along.part, height.part, size.part, reset]);
}

function note(scene) {
    const thinned = scene.count < scene.total
        ? `It shows ${number(scene.count, 0)} of ${number(scene.total, 0)} points. `
        : "";
    const step = Math.max(scene.step * 1e3, 0.01);
    return make("p", { className: "cv-note" }, [
        `This view is for looking. ${thinned}Positions are in steps of ${number(step, step < 1 ? 2 : 1)} mm, and values are `
        + "rounded. For numbers use gauges.csv and strain.laz.",
    ]);
}

function help() {
    const rows = HELP.flatMap(([how, what]) => [make("dt", {}, [how]), make("dd", {}, [what])]);
    return make("details", { className: "cv-help" }, [make("summary", {}, ["Mouse, touch and keys"]), make("dl", {}, rows)]);
}
