// SPDX-License-Identifier: MIT
// Elements of the page. Text goes in as text, never as markup.

export function make(tag, properties = {}, children = []) {
    const element = document.createElement(tag);
    for (const [name, value] of Object.entries(properties)) {
        if (name in element) element[name] = value;
        else element.setAttribute(name, value);
    }
    element.append(...children);
    return element;
}
