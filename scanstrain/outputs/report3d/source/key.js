// SPDX-License-Identifier: MIT
// The colour key of the attribute shown.

import { make } from "./parts.js";
import { amount, nameWithUnit, number } from "./words.js";

const LOG_TICKS = [1e-4, 1e-3, 0.01, 0.05, 0.2, 1];

export function key(layer, scene, onlySignificant) {
    const head = make("p", { className: "cv-key-head" }, [make("strong", {}, [nameWithUnit(layer)]), ` ${facts(layer, scene)}`]);
    const parts = layer.form === "steps" ? [steps(layer)] : [ramp(layer), ticks(layer)];
    const greys = [];
    if (onlySignificant && layer.masked) greys.push(swatch(scene.greys.notSignificant, "not significant"));
    if (layer.codes.some((code) => code === 0)) greys.push(swatch(scene.greys.notObservable, "not observable"));
    if (greys.length) parts.push(make("p", { className: "cv-swatches" }, greys));
    return [head, ...parts];
}

function facts(layer, scene) {
    const parts = [layer.meaning, `gauge length ${number(scene.gaugeLength, 2)} m`];
    if (layer.limit !== null) parts.push(`detection limit ${amount(layer.limit, layer)} (95\u00a0%, median)`);
    return parts.join("; ");
}

// The table itself, a pixel a row.
function ramp(layer) {
    const canvas = make("canvas", { className: "cv-ramp", width: layer.table.length / 3, height: 1, role: "presentation" });
    const context = canvas.getContext("2d");
    const image = context.createImageData(canvas.width, 1);
    for (let row = 0; row < canvas.width; row++) image.data.set([...layer.table.subarray(3 * row, 3 * row + 3), 255], 4 * row);
    context.putImageData(image, 0, 0);
    return canvas;
}

function ticks(layer) {
    const { low, high, factor } = layer;
    if (layer.form === "log") {
        const inside = LOG_TICKS.filter((tick) => tick >= low && tick <= high);
        return scale(inside.map((tick) => [Math.log(tick / low) / Math.log(high / low), String(tick)]));
    }
    const signed = layer.kind === "signed";
    const shares = [0, 0.25, 0.5, 0.75, 1];
    const values = shares.map((share) => (low + share * (high - low)) * factor);
    const decimals = Math.max(...values.map(decimalsOf));
    return scale(shares.map((share, at) => [share, number(values[at], decimals, signed)]));
}

// Decimals that show a value exactly, up to four.
function decimalsOf(value) {
    for (let count = 0; count < 4; count++) {
        if (Math.abs(Number(value.toFixed(count)) - value) <= 1e-6 * Math.max(Math.abs(value), 1e-9)) return count;
    }
    return 4;
}

function scale(marks) {
    const parts = marks.map(([share, words]) => {
        const mark = make("span", {}, [words]);
        mark.style.left = `${100 * share}%`;
        mark.style.transform = `translateX(${-100 * share}%)`;
        return mark;
    });
    return make("div", { className: "cv-ticks" }, parts);
}

function steps(layer) {
    const rows = layer.labels.map((label, at) => swatch(layer.table.subarray(3 * at, 3 * at + 3), label));
    return make("p", { className: "cv-swatches" }, rows);
}

function swatch(colour, words) {
    const box = make("i", {});
    box.style.background = `rgb(${[...colour].join(" ")})`;
    return make("span", { className: "cv-swatch" }, [box, words]);
}
