"use strict";
// Choose a turn anywhere and see it everywhere: every element that shows a turn carries its key in data-turn.
(() => {
  const panel = document.getElementById("chosen");
  const said = document.getElementById("chosen-said");
  const pair = document.getElementById("chosen-pair");
  const rows = [...document.querySelectorAll("tr[data-turn]")];
  const keys = rows.map((row) => row.dataset.turn);
  const near = 14;
  let now = null;
  let from = null;

  const showing = (key) => document.querySelectorAll(`[data-turn="${CSS.escape(key)}"]`);

  const ring = (mark) => {
    if (!mark.querySelector("use")) return;
    const box = mark.getBBox();
    const circle = document.createElementNS("http://www.w3.org/2000/svg", "circle");
    circle.setAttribute("class", "mark-ring");
    circle.setAttribute("cx", box.x + box.width / 2);
    circle.setAttribute("cy", box.y + box.height / 2);
    circle.setAttribute("r", Math.max(box.width, box.height) / 2 + 3.2);
    mark.append(circle);
  };

  const clear = () => {
    document.querySelectorAll(".mark-ring").forEach((one) => one.remove());
    document.querySelectorAll(".chosen").forEach((one) => one.classList.remove("chosen"));
  };

  const choose = (key) => {
    clear();
    now = key;
    showing(key).forEach((one) => {
      if (one.tagName === "A") return;
      one.classList.add("chosen");
      if (one.classList.contains("mark")) ring(one);
    });
    const row = document.getElementById(`row-${key}`);
    const card = document.getElementById(`card-${key}`);
    said.textContent = row.dataset.said;
    const stills = card && card.querySelector(".pair");
    pair.replaceChildren(...(stills ? [stills.cloneNode(true)] : []));
    document.getElementById("to-row").href = `#row-${key}`;
    const link = document.getElementById("to-card");
    link.href = card ? `#card-${key}` : "#answer";
    link.hidden = !card;
    panel.hidden = false;
  };

  const leave = () => {
    clear();
    now = null;
    const inside = panel.contains(document.activeElement);
    panel.hidden = true;
    if (inside && from && from.isConnected) from.focus({ preventScroll: true });
  };

  const step = (by) => {
    const here = keys.indexOf(now);
    const next = here < 0 ? 0 : Math.min(Math.max(here + by, 0), keys.length - 1);
    choose(keys[next]);
    const active = document.activeElement;
    if (active && active.closest && active.closest("table.turns tbody")) rows[next].querySelector("a").focus();
  };

  const nearest = (plot, x, y) => {
    let best = null;
    let least = near;
    plot.querySelectorAll(".mark[data-turn]").forEach((mark) => {
      if (!mark.querySelector("use")) return;
      const box = mark.getBoundingClientRect();
      const far = Math.hypot(box.x + box.width / 2 - x, box.y + box.height / 2 - y);
      if (far < least) { least = far; best = mark; }
    });
    return best;
  };

  document.addEventListener("click", (event) => {
    if (panel.contains(event.target) || event.target.closest("summary")) return;
    const link = event.target.closest("a");
    if (link && !link.dataset.turn) return;
    const plot = event.target.closest(".plot svg");
    const one = event.target.closest("[data-turn]") || (plot && nearest(plot, event.clientX, event.clientY));
    if (!one) return;
    if (link) event.preventDefault();
    from = link || one.closest("[tabindex]") || null;
    choose(one.dataset.turn);
  });

  document.addEventListener("keydown", (event) => {
    if (event.altKey || event.ctrlKey || event.metaKey || event.shiftKey) return;
    const at = document.activeElement;
    const inPlot = at && at.matches && at.matches(".plot .scroll");
    const inTable = at && at.closest && at.closest("table.turns tbody");
    if (event.key === "Escape" && now !== null) { leave(); return; }
    if (event.key === "Enter" && inPlot) { from = at; step(0); event.preventDefault(); return; }
    const ahead = event.key === "ArrowRight" || (inTable && event.key === "ArrowDown");
    const back = event.key === "ArrowLeft" || (inTable && event.key === "ArrowUp");
    if ((ahead || back) && (now !== null || inPlot || inTable)) { step(ahead ? 1 : -1); event.preventDefault(); }
  });

  document.getElementById("earlier").addEventListener("click", () => step(-1));
  document.getElementById("later").addEventListener("click", () => step(1));
  document.getElementById("no-more").addEventListener("click", leave);
  window.addEventListener("beforeprint", () => document.querySelectorAll("#record details").forEach((one) => {
    one.open = true;
  }));
})();
