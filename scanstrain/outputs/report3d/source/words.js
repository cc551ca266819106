// SPDX-License-Identifier: MIT
// Numbers as a person reads them, as outputs/words.py writes them.

const NORMAL_95 = 1.96;
const THIN = "\u202f"; // narrow space between thousands
const MINUS = "\u2212";

// Decimals that show two figures of a value.
function digits(value) {
    if (!Number.isFinite(value) || value === 0) return 0;
    return Math.min(Math.max(0, 1 - Math.floor(Math.log10(Math.abs(value)))), 12);
}

export function number(value, decimals, sign = false) {
    const fixed = Math.abs(value).toFixed(decimals);
    const zero = Number(fixed) === 0;
    const [whole, rest] = fixed.split(".");
    const grouped = whole.replace(/\B(?=(\d{3})+$)/g, THIN) + (rest ? `.${rest}` : "");
    return (zero ? "" : value < 0 ? MINUS : sign ? "+" : "") + grouped;
}

export function amount(value, layer) {
    const person = value * layer.factor;
    return withUnit(number(person, digits(person)), layer);
}

// A value with the half width of its 95 % interval, to two figures of that width.
export function reading(found, layer) {
    if (found.row !== undefined) return layer.labels[found.row];
    const person = found.number * layer.factor;
    if (found.error === null) {
        return found.beyond + withUnit(number(person, Math.max(digits(person), 0), layer.kind === "signed"), layer);
    }
    const half = NORMAL_95 * found.error * layer.factor;
    const decimals = digits(half);
    const value = number(person, decimals, layer.kind === "signed");
    return found.beyond + withUnit(`${value} ± ${number(half, decimals)}`, layer);
}

export function metres(value) {
    return `${number(value, 2)} m`;
}

export function nameWithUnit(layer) {
    return layer.unit ? `${layer.title} [${layer.unit}]` : layer.title;
}

function withUnit(text, layer) {
    return layer.unit ? `${text} ${layer.unit}` : text;
}
