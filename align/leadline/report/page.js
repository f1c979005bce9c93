"use strict";
(() => {
  const planes = document.querySelector(".planes");
  const slider = document.getElementById("cut");
  if (planes && slider) {
    slider.addEventListener("input", () => planes.style.setProperty("--cut", slider.value + "%"));
    for (const frame of planes.querySelectorAll(".swipe")) {
      frame.addEventListener("pointermove", (event) => {
        if (!event.buttons) return;
        const box = frame.getBoundingClientRect();
        slider.value = Math.round((100 * (event.clientX - box.left)) / box.width);
        planes.style.setProperty("--cut", slider.value + "%");
      });
    }
    document.getElementById("lines").addEventListener("change", (event) =>
      planes.classList.toggle("bare", !event.target.checked));
  }
  const table = document.getElementById("channel-table");
  if (!table) return;
  const body = table.tBodies[0];
  const rows = Array.from(body.rows);
  const heads = Array.from(table.tHead.rows[0].cells);
  const valueOf = (row, column, numeric) => {
    const text = row.cells[column].textContent;
    if (!numeric) return text;
    return text === "" ? -Infinity : Number(text);
  };
  heads.forEach((head, column) => head.querySelector("button").addEventListener("click", () => {
    const up = head.getAttribute("aria-sort") !== "ascending";
    heads.forEach((other) => other.removeAttribute("aria-sort"));
    head.setAttribute("aria-sort", up ? "ascending" : "descending");
    const numeric = head.classList.contains("n");
    const keyed = rows.map((row, index) => [valueOf(row, column, numeric), index, row]);
    keyed.sort((a, b) => {
      const order = numeric ? a[0] - b[0] || 0 : a[0].localeCompare(b[0], undefined, { numeric: true });
      return (up ? order : -order) || a[1] - b[1];
    });
    body.append(...keyed.map((item) => item[2]));
  }));
  const words = document.getElementById("find");
  const which = document.getElementById("which");
  const count = document.getElementById("count");
  const filter = () => {
    const wanted = words.value.toLowerCase().split(/\s+/).filter(Boolean);
    let shown = 0;
    for (const row of rows) {
      const text = row.textContent.toLowerCase();
      const here = (which.value === "" || row.cells[0].textContent === which.value) &&
        wanted.every((word) => text.includes(word));
      row.hidden = !here;
      shown += here ? 1 : 0;
    }
    count.textContent = shown + " of " + rows.length + " channels";
  };
  words.addEventListener("input", filter);
  which.addEventListener("change", filter);
  filter();
})();
