// SPDX-License-Identifier: MIT
"use strict";
// Tables sort by the buttons in their heads, and copy as text that a spreadsheet takes.
(() => {
    const aloud = document.getElementById("said-aloud");

    const key = cell => (cell.dataset.sort === undefined ? cell.textContent.trim() : Number(cell.dataset.sort));

    function compare(a, b) {
        const numbers = [a, b].map(each => typeof each === "number");
        if (numbers[0] && numbers[1]) return a - b;
        return String(a).localeCompare(String(b), "en", { numeric: true });
    }

    function sort(table, head, column) {
        const down = head.getAttribute("aria-sort") === "ascending";
        for (const other of table.tHead.rows[0].cells) other.removeAttribute("aria-sort");
        head.setAttribute("aria-sort", down ? "descending" : "ascending");
        const body = table.tBodies[0];
        // cells without a number stay at the end, whichever way the column runs
        const empty = row => row.cells[column].textContent.trim() === "–";
        const rows = [...body.rows].sort((a, b) => empty(a) - empty(b)
            || (down ? -1 : 1) * compare(key(a.cells[column]), key(b.cells[column])));
        body.append(...rows);
        aloud.textContent = `Sorted by ${head.textContent}, ${down ? "descending" : "ascending"}`;
    }

    // minus signs and thin spaces as other programs read them
    const plain = text => text.trim().replace(/\u2212/g, "-").replace(/(\d)[\u2009\u202f](?=\d{3})/g, "$1")
        .replace(/\s+/g, " ");

    async function copy(table, button) {
        const text = [...table.rows].map(row => [...row.cells].map(cell => plain(cell.textContent)).join("\t")).join("\n");
        let done = true;
        try {
            await navigator.clipboard.writeText(text);
        } catch {
            const area = document.createElement("textarea");
            area.value = text;
            document.body.append(area);
            area.select();
            done = document.execCommand("copy");
            area.remove();
            button.focus();
        }
        button.textContent = done ? "Copied" : "Copying was refused";
        aloud.textContent = button.textContent;
        setTimeout(() => { button.textContent = "Copy as text"; }, 2000);
    }

    for (const table of document.querySelectorAll(".table-box table")) {
        const few = table.tBodies[0].rows.length < 2;
        [...table.tHead.rows[0].cells].forEach((head, column) => {
            if (few || !head.textContent.trim()) return;
            const button = document.createElement("button");
            button.type = "button";
            button.className = "sorter";
            button.append(...head.childNodes);
            button.addEventListener("click", () => sort(table, head, column));
            head.append(button);
        });
        const button = document.createElement("button");
        button.type = "button";
        button.className = "copy";
        button.textContent = "Copy as text";
        button.setAttribute("aria-label", `Copy as text: ${table.caption.textContent}`);
        button.addEventListener("click", () => copy(table, button));
        table.closest(".table-box").append(button);
    }
})();
