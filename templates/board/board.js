"use strict";

// Sorting: each heading that can sort becomes a button; rows are compared by their cell's key, or its text.
function sortable(table) {
  const heads = Array.from(table.tHead.rows[0].cells);
  const body = table.tBodies[0];
  heads.forEach((head, column) => {
    const kind = head.dataset.sort;
    if (!kind) return;
    const button = document.createElement("button");
    button.type = "button";
    button.className = "sort";
    button.append(...head.childNodes);
    head.append(button);
    button.addEventListener("click", () => {
      const falling = head.getAttribute("aria-sort") === "ascending";
      heads.forEach((other) => other.removeAttribute("aria-sort"));
      head.setAttribute("aria-sort", falling ? "descending" : "ascending");
      const key = (row) => row.cells[column].dataset.key ?? row.cells[column].textContent.trim();
      const compare = kind === "number" ? (a, b) => Number(a) - Number(b) : (a, b) => a.localeCompare(b);
      const rows = Array.from(body.rows).sort((a, b) => compare(key(a), key(b)));
      if (falling) rows.reverse();
      body.append(...rows);
    });
  });
}

// Filtering: a row stays when it holds the words and has the standing that was chosen.
function filterable(table) {
  const inputs = Array.from(document.querySelectorAll("[data-filter]"));
  const found = document.getElementById(table.dataset.found);
  const apply = () => {
    const wanted = Object.fromEntries(inputs.map((input) => [input.dataset.filter, input.value.trim().toLowerCase()]));
    let shown = 0;
    for (const row of table.tBodies[0].rows) {
      const fits = row.textContent.toLowerCase().includes(wanted.text) && (!wanted.standing || row.dataset.standing === wanted.standing);
      row.hidden = !fits;
      shown += fits ? 1 : 0;
    }
    found.textContent = `${shown} of ${table.tBodies[0].rows.length} shown`;
  };
  inputs.forEach((input) => input.addEventListener("input", apply));
  apply();
}

// Charts: pointing at a chart and moving its slider do the same, they choose a session and read it out.
function readable(chart) {
  const points = JSON.parse(chart.querySelector("script").textContent);
  const plot = chart.querySelector(".plot");
  const slider = chart.querySelector("input");
  const output = chart.querySelector("output");
  const cursor = chart.querySelector(".cursor");
  const dot = chart.querySelector(".dot");
  const choose = (number, show) => {
    const [x, y, words] = points[number];
    slider.value = number;
    slider.setAttribute("aria-valuetext", words);
    output.textContent = words;
    for (const part of [cursor, dot]) {
      part.style.left = `${x}%`;
      part.hidden = !show;
    }
    dot.style.top = `${y}%`;
  };
  slider.addEventListener("input", () => choose(Number(slider.value), true));
  slider.addEventListener("focus", () => choose(Number(slider.value), true));
  plot.addEventListener("pointermove", (event) => {
    const box = plot.getBoundingClientRect();
    const at = (100 * (event.clientX - box.left)) / box.width;
    let nearest = 0;
    points.forEach((point, number) => {
      if (Math.abs(point[0] - at) < Math.abs(points[nearest][0] - at)) nearest = number;
    });
    choose(nearest, true);
  });
  choose(points.length - 1, false);
}

// Albums: the slider runs through the sessions of one kind of image.
function browsable(album) {
  const images = JSON.parse(album.querySelector("script").textContent);
  const slider = album.querySelector("input");
  const image = album.querySelector("img");
  const link = album.querySelector("a.full");
  const output = album.querySelector("output");
  const choose = (number) => {
    const [source, day, words] = images[number];
    if (image.getAttribute("src") !== source) image.src = source;
    image.alt = words;
    link.href = source;
    output.textContent = day;
    slider.setAttribute("aria-valuetext", day);
  };
  slider.addEventListener("input", () => choose(Number(slider.value)));
  choose(images.length - 1);
}

document.querySelectorAll("table.sortable").forEach(sortable);
document.querySelectorAll("table[data-found]").forEach(filterable);
document.querySelectorAll("[data-chart]").forEach(readable);
document.querySelectorAll("[data-album]").forEach(browsable);
