"use strict";

function theme() {
  const button = document.getElementById("theme");
  const system = matchMedia("(prefers-color-scheme: dark)");
  const dark = () => (document.documentElement.dataset.theme ?? (system.matches ? "dark" : "light")) === "dark";
  const name = () => { button.textContent = dark() ? "Light" : "Dark"; button.title = `Show this in ${dark() ? "light" : "dark"} colours`; };
  button.hidden = false;
  name();
  system.addEventListener("change", name);
  button.addEventListener("click", () => {
    const chosen = dark() ? "light" : "dark";
    document.documentElement.dataset.theme = chosen;
    try { localStorage.setItem("theme", chosen); } catch { /* it then lasts for this page only */ }
    name();
  });
}

function search() {
  const box = document.getElementById("search");
  const list = document.getElementById("suggested");
  document.addEventListener("keydown", (event) => {
    const typing = event.target instanceof Element && event.target.closest("input, select, textarea");
    if (event.key !== "/" || typing || event.ctrlKey || event.metaKey || event.altKey) return;
    event.preventDefault();
    box.focus();
    box.select();
  });
  let timer = 0;
  let asked = "";
  box.addEventListener("input", () => {
    clearTimeout(timer);
    timer = setTimeout(async () => {
      asked = box.value.trim();
      if (asked.length < 2) { list.replaceChildren(); return; }
      const words = asked;
      let found = [];
      try {
        const answer = await fetch(`/suggest.json?q=${encodeURIComponent(words)}`);
        if (answer.ok) found = await answer.json();
      } catch { return; }
      if (words !== asked) return;
      list.replaceChildren(...found.map((each) => {
        const option = document.createElement("option");
        option.value = each.name;
        option.label = `${each.name}: ${each.about}`;
        return option;
      }));
    }, 150);
  });
}

function narrow() {
  for (const box of document.querySelectorAll("input[data-narrow]")) {
    const table = document.getElementById(box.dataset.narrow);
    const rows = [...table.tBodies[0].rows];
    const count = document.getElementById(`${box.dataset.narrow}-count`);
    const words = rows.map((row) => [...row.cells].slice(0, 3)
      .map((cell) => `${cell.textContent} ${cell.title}`).join("\n").toLowerCase());
    const before = box.value.trim().toLowerCase();
    box.addEventListener("input", () => {
      const now = box.value.trim().toLowerCase();
      if (!now.includes(before)) return; // the rows for it are not on this page; the button fetches them
      let shown = 0;
      rows.forEach((row, place) => { row.hidden = !words[place].includes(now); shown += row.hidden ? 0 : 1; });
      count.textContent = `${shown} of ${rows.length} legs shown.`;
    });
  }
}

function map() {
  const drawing = document.getElementById("map");
  if (drawing === null) return;
  const detail = document.getElementById("detail");
  const legs = [...drawing.querySelectorAll("a.ribbon")];
  const tell = (event) => {
    const leg = event.target instanceof Element && event.target.closest("a.ribbon");
    if (leg) detail.textContent = leg.getAttribute("aria-label");
  };
  drawing.addEventListener("pointerover", tell);
  drawing.addEventListener("focusin", tell);
  // One stop for the Tab key; the arrow keys go from leg to leg.
  legs.forEach((leg, place) => leg.setAttribute("tabindex", place === 0 ? "0" : "-1"));
  drawing.addEventListener("keydown", (event) => {
    const step = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 }[event.key];
    const from = legs.indexOf(document.activeElement);
    if (step === undefined || from < 0) return;
    event.preventDefault();
    const leg = legs[(from + step + legs.length) % legs.length];
    legs[from].setAttribute("tabindex", "-1");
    leg.setAttribute("tabindex", "0");
    leg.focus();
  });
}

function now() {
  const facts = document.querySelector("[data-now]");
  if (facts === null) return;
  setInterval(async () => {
    if (document.hidden) return;
    try {
      const answer = await fetch(facts.dataset.now);
      if (!answer.ok) return;
      const found = await answer.json();
      for (const place of facts.querySelectorAll("[data-field]")) {
        const text = found[place.dataset.field] || "not on sale";
        if (place.textContent !== text) place.textContent = text;
      }
    } catch { /* the next look may succeed */ }
  }, 5000);
}

theme();
search();
narrow();
map();
now();
