// SPDX-License-Identifier: MIT
// What is known at one point: the attribute shown, then the others, then the place.

import { make } from "./parts.js";
import { amount, metres, reading } from "./words.js";

export function emptyPanel(missed) {
    const words = missed
        ? "No point there. Click on the cloud, or bring it under the cross and press Enter."
        : "Click a point to read its values, or press Enter for the point under the cross.";
    return [make("p", { className: "cv-hint" }, [words])];
}

export function filledPanel(cloud, state, { centre, clear }) {
    const { layer, picked } = state;
    const buttons = [["Turn about this point", centre], ["Clear", clear]].map(([words, act]) => {
        const button = make("button", { type: "button", className: "cv-button" }, [words]);
        button.addEventListener("click", act);
        return button;
    });
    return [
        make("p", { className: "cv-title" }, [layer.title]),
        make("p", { className: "cv-value" }, [said(cloud, layer, picked)]),
        make("p", { className: "cv-about" }, [about(cloud, layer, picked)]),
        others(cloud, layer, picked),
        place(cloud, picked),
        make("p", { className: "cv-buttons" }, buttons),
    ];
}

function said(cloud, layer, i) {
    const found = cloud.value(layer, i);
    if (found === null) return "not observable here";
    return reading(found, layer) + (unbounded(found, layer) ? " (no interval given)" : "");
}

// Whether a change is shown whose standard error is not known, so that nobody takes the bare number for a sure one.
function unbounded(found, layer) {
    return layer.masked && found.error === null;
}

function about(cloud, layer, i) {
    const found = cloud.value(layer, i);
    if (found === null) return sentence(reason(cloud, layer, i));
    const parts = [];
    if (found.error) parts.push("value with 95 % interval");
    if (unbounded(found, layer)) parts.push("no standard error of this value is stored");
    if (layer.masked) parts.push(cloud.changed[i] ? "significant change at this place" : "no significant change at this place");
    if (layer.limit !== null) parts.push(`median detection limit ${amount(layer.limit, layer)}`);
    return parts.length ? sentence(parts.join("; ")) : "";
}

function sentence(words) {
    return `${words[0].toUpperCase()}${words.slice(1)}.`;
}

function reason(cloud, layer, i) {
    return cloud.status[i] ? cloud.scene.words[cloud.status[i]] : layer.missing;
}

function others(cloud, shown, i) {
    const rows = cloud.layers.filter((layer) => layer !== shown).map((layer) =>
        make("tr", {}, [make("th", { scope: "row" }, [layer.title]), make("td", {}, [said(cloud, layer, i)])]));
    return make("table", { className: "cv-others" }, [make("tbody", {}, rows)]);
}

function place(cloud, i) {
    const names = ["x", "y", "z"];
    const at = cloud.place(i).map((value, axis) => [names[axis], metres(value)]);
    const along = cloud.alongMetres[i];
    if (!Number.isNaN(along)) at.push([cloud.scene.along.name, metres(along)]);
    const parts = at.flatMap(([name, value]) => [make("dt", {}, [name]), make("dd", {}, [value])]);
    return make("dl", { className: "cv-place" }, parts);
}
