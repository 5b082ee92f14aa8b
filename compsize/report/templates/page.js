"use strict";
(() => {
  document.documentElement.classList.add("js");

  // What a cell holds: the unrounded number where there is one, otherwise its text.
  const held = (cell) => {
    if (!cell) return "";
    if (cell.dataset.value !== undefined) return cell.dataset.value;
    if (cell.classList.contains("number")) return "";
    const copy = cell.cloneNode(true);
    copy.querySelectorAll(".mark, .sign").forEach((extra) => extra.remove());
    return copy.textContent.replace(/[\t\r\n]+/g, " ").trim();
  };

  const order = (a, b) => {
    if (a === "" || b === "") return (a === "") - (b === "");
    const x = Number(a), y = Number(b);
    if (!Number.isNaN(x) && !Number.isNaN(y)) return x - y;
    return a < b ? -1 : a > b ? 1 : 0;
  };

  document.querySelectorAll("table").forEach((table) => {
    const heads = [...table.querySelectorAll("thead .columns th")];
    const body = table.tBodies[0];
    heads.forEach((head, column) => {
      head.setAttribute("aria-sort", "none");
      head.querySelector("button").addEventListener("click", () => {
        const down = head.getAttribute("aria-sort") === "ascending";
        heads.forEach((other) => other.setAttribute("aria-sort", "none"));
        head.setAttribute("aria-sort", down ? "descending" : "ascending");
        const rows = [...body.rows].map((row) => [held(row.cells[column]), row]);
        rows.sort(([a], [b]) => {
          const sign = down && a !== "" && b !== "" ? -1 : 1; // blanks stay last
          return sign * order(a, b);
        });
        rows.forEach(([, row]) => body.append(row));
      });
    });
  });

  const asText = (table) => [...table.rows]
    .filter((row) => !row.classList.contains("groups"))
    .map((row) => [...row.cells].map((cell) => cell.dataset.name ?? held(cell)).join("\t"))
    .join("\n");

  const put = async (text) => {
    try {
      await navigator.clipboard.writeText(text);
    } catch {
      const area = document.createElement("textarea");
      area.value = text;
      document.body.append(area);
      area.select();
      const done = document.execCommand("copy");
      area.remove();
      if (!done) throw new Error("not copied");
    }
  };

  document.querySelectorAll("button.copy").forEach((button) => {
    const label = button.textContent;
    button.addEventListener("click", async () => {
      const text = asText(button.closest("figure").querySelector("table"));
      try {
        await put(text);
        button.textContent = "Copied";
      } catch {
        button.textContent = "Copying is not allowed here";
      }
      setTimeout(() => { button.textContent = label; }, 1600);
    });
  });

  document.querySelectorAll(".curves").forEach((set) => {
    const choice = set.querySelector("select");
    const drawings = [...set.querySelectorAll("figure.drawing")];
    const show = () => drawings.forEach((drawing, i) => { drawing.hidden = Boolean(choice) && i !== Number(choice.value); });
    if (choice) choice.addEventListener("change", show);
    show();
  });
})();
