// SPDX-License-Identifier: MIT
// The data of a view, unpacked: positions, values, standard errors, and the colour of every point.

// Undoes pack.py: base64, inflate, byte planes, folded differences.
async function unpack(text, count, bytes) {
    const deflated = fromBase64(text);
    const stream = new Blob([deflated]).stream().pipeThrough(new DecompressionStream("deflate"));
    const plane = new Uint8Array(await new Response(stream).arrayBuffer());
    const codes = bytes === 2 ? new Uint16Array(count) : new Uint8Array(count);
    let last = 0;
    for (let i = 0; i < count; i++) {
        const folded = bytes === 2 ? plane[i] | (plane[count + i] << 8) : plane[i];
        last += folded & 1 ? -((folded + 1) >> 1) : folded >> 1;
        codes[i] = last; // typed arrays wrap around, as the packing does
    }
    return codes;
}

function fromBase64(text) {
    const letters = atob(text);
    const bytes = new Uint8Array(letters.length);
    for (let i = 0; i < letters.length; i++) bytes[i] = letters.charCodeAt(i);
    return bytes;
}

export async function readCloud(scene) {
    const { count } = scene;
    const read = (text, bytes) => unpack(text, count, bytes);
    const [x, y, z] = await Promise.all(scene.position.map((text) => read(text, 2)));
    const facing = await Promise.all(scene.facing.map((text) => read(text, 1)));
    const [status, changed] = await Promise.all([read(scene.status, 1), read(scene.changed, 1)]);
    const layers = await Promise.all(scene.layers.map((layer) => readLayer(layer, read)));
    const along = scene.along.codes ? await read(scene.along.codes, 2) : null;
    return new Cloud(scene, { x, y, z, facing, status, changed, layers, along });
}

async function readLayer(layer, read) {
    return {
        ...layer,
        table: fromBase64(layer.table),
        codes: await read(layer.codes, 2),
        errors: layer.error ? await read(layer.error.codes, 1) : null,
    };
}

class Cloud {
    constructor(scene, data) {
        this.scene = scene;
        this.count = scene.count;
        Object.assign(this, data);
        const { count } = this;
        this.position = new Uint16Array(3 * count);
        this.normal = new Int8Array(4 * count);
        for (let i = 0; i < count; i++) {
            this.position.set([this.x[i], this.y[i], this.z[i]], 3 * i);
            for (let axis = 0; axis < 3; axis++) this.normal[4 * i + axis] = this.facing[axis][i] - 127;
        }
        this.size = [this.x, this.y, this.z].map((codes) => scene.step * codes.reduce((a, b) => Math.max(a, b), 0));
        this.alongMetres = this.#alongMetres();
        this.alongRange = rangeOf(this.alongMetres);
        this.heightRange = [scene.corner[2], scene.corner[2] + this.size[2]];
        this.spacing = this.#spacing();
    }

    // Coordinates of a point in the file [m].
    place(i) {
        const { corner, step } = this.scene;
        return [corner[0] + step * this.x[i], corner[1] + step * this.y[i], corner[2] + step * this.z[i]];
    }

    // Some thousand points, evenly chosen [m from the corner].
    sample() {
        const points = [];
        const { step } = this.scene;
        for (let i = 0; i < this.count; i += Math.ceil(this.count / 4000)) {
            points.push([step * this.x[i], step * this.y[i], step * this.z[i]]);
        }
        return points;
    }

    #alongMetres() {
        const { along, step } = this.scene;
        const metres = new Float32Array(this.count);
        for (let i = 0; i < this.count; i++) {
            if (along.direction) metres[i] = step * (along.direction[0] * this.x[i] + along.direction[1] * this.y[i]);
            else metres[i] = this.along[i] ? along.low + along.step * (this.along[i] - 1) : NaN;
        }
        if (along.direction) {
            const lowest = rangeOf(metres)[0];
            for (let i = 0; i < this.count; i++) metres[i] -= lowest;
        }
        return metres;
    }

    // Typical distance of neighbours [m]: the points follow a curve through space, so that most steps are to one.
    #spacing() {
        const steps = [];
        for (let i = 1; i < this.count; i += Math.ceil(this.count / 4000)) {
            steps.push(Math.hypot(this.x[i] - this.x[i - 1], this.y[i] - this.y[i - 1], this.z[i] - this.z[i - 1]));
        }
        steps.sort((a, b) => a - b);
        return this.scene.step * Math.max(steps[steps.length >> 1] ?? 1, 1);
    }

    // Number and standard error of a point in stored units; null where the data support none.
    value(layer, i) {
        const code = layer.codes[i];
        if (code === 0) return null;
        const index = code - 1 + layer.first;
        if (layer.form === "steps") return { row: index };
        const share = (index + 0.5) / (layer.perRow * (layer.table.length / 3));
        const number = layer.form === "log"
            ? layer.low * (layer.high / layer.low) ** share
            : layer.low + share * (layer.high - layer.low);
        const error = layer.errors && layer.errors[i] ? layer.error.low * layer.error.ratio ** (layer.errors[i] - 1) : null;
        const most = layer.beyond[1] && code === 65534;
        const least = layer.beyond[0] && code === 1;
        return { number, error, beyond: most ? "at least " : least ? "at most " : "" };
    }

    // Red, green, blue, and 255 for every point.
    paint(layer, onlySignificant, target) {
        const { notSignificant, notObservable } = this.scene.greys;
        const last = layer.table.length / 3 - 1;
        const grey = onlySignificant && layer.masked;
        for (let i = 0; i < this.count; i++) {
            const code = layer.codes[i];
            let colour = layer.table;
            let at = 0;
            if (code === 0) colour = notObservable;
            else if (grey && !this.changed[i]) colour = notSignificant;
            else at = 3 * Math.min(Math.max(Math.floor((code - 1 + layer.first) / layer.perRow), 0), last);
            target[4 * i] = colour[at];
            target[4 * i + 1] = colour[at + 1];
            target[4 * i + 2] = colour[at + 2];
            target[4 * i + 3] = 255;
        }
    }
}

export function rangeOf(values) {
    let low = Infinity;
    let high = -Infinity;
    for (const value of values) {
        if (value < low) low = value;
        if (value > high) high = value;
    }
    return low <= high ? [low, high] : [0, 0];
}
