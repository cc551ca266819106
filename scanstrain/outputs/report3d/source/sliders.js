// SPDX-License-Identifier: MIT
// Sliders with their values beside them. All are the browser's own inputs, so that keys and screen readers work.

import { make } from "./parts.js";
import { metres, number } from "./words.js";

const STEPS = 200; // steps of a range, about one a pixel

function input(label, min, max, step, value) {
    return make("input", { type: "range", min, max, step, value, "aria-label": label });
}

// Two ends on one track: what lies between them is shown.
export function span(name, [low, high], changed) {
    const step = Math.max((high - low) / STEPS, 0.001);
    const last = Math.max(Math.ceil((high - low) / step - 1e-6), 1);
    const at = (index) => (index === last ? high : low + index * step);
    const from = input(`${name} from`, 0, last, 1, 0);
    const to = input(`${name} to`, 0, last, 1, last);
    const says = make("output", {});
    const track = make("div", { className: "cv-track" }, [from, to]);
    const update = () => {
        const [a, b] = [Number(from.value), Number(to.value)];
        says.textContent = `${metres(at(a))} to ${metres(at(b))}`;
        from.setAttribute("aria-valuetext", metres(at(a)));
        to.setAttribute("aria-valuetext", metres(at(b)));
        track.style.setProperty("--from", `${(100 * a) / last}%`);
        track.style.setProperty("--to", `${(100 * b) / last}%`);
        from.style.zIndex = a > last / 2 ? 2 : 1; // the end that can still move lies on top
        changed([at(a), at(b)]);
    };
    from.addEventListener("input", () => {
        from.value = Math.min(Number(from.value), Number(to.value));
        update();
    });
    to.addEventListener("input", () => {
        to.value = Math.max(Number(from.value), Number(to.value));
        update();
    });
    const reset = () => {
        from.value = 0;
        to.value = last;
        update();
    };
    update();
    return { part: make("div", { className: "cv-slider", role: "group", "aria-label": `Show ${name}` }, [title(name), track, says]), reset };
}

export function slider(name, { min, max, step, start }, changed) {
    const ends = input(name, min, max, step, start);
    const says = make("output", {});
    const update = () => {
        says.textContent = `× ${number(Number(ends.value), 2)}`;
        changed(Number(ends.value));
    };
    ends.addEventListener("input", update);
    const reset = () => {
        ends.value = start;
        update();
    };
    says.textContent = `× ${number(start, 2)}`;
    return { part: make("div", { className: "cv-slider" }, [title(name), make("div", { className: "cv-track cv-single" }, [ends]), says]), reset };
}

function title(name) {
    return make("span", { className: "cv-name" }, [name[0].toUpperCase() + name.slice(1)]);
}
