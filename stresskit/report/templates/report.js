"use strict";
(() => {
  const all = (q, from = document) => [...from.querySelectorAll(q)];
  const make = (name, cls, text = "") => {
    const e = document.createElement(name);
    e.className = cls;
    e.textContent = text;
    return e;
  };

  // Which scenarios and which segment the pictures show. Without this script they show everything, as in print.
  const box = document.getElementById("switch");
  const hidden = new Set();
  if (box) {
    const boxes = all("input", box), pick = box.querySelector("select"), state = document.getElementById("switch-state");
    const apply = () => {
      if (boxes.length && !boxes.some((b) => b.checked)) boxes.forEach((b) => (b.checked = true));
      hidden.clear();
      boxes.forEach((b) => b.checked || hidden.add(b.value));
      const segment = pick ? pick.value : "";
      all("main [data-s]").forEach((e) => e.classList.toggle("off", hidden.has(e.dataset.s)));
      all("main [data-g]").forEach((e) => e.classList.toggle("off", segment !== "" && e.dataset.g !== segment));
      const some = boxes.filter((b) => b.checked).map((b) => b.dataset.name);
      const words = hidden.size ? [some.join(", ")] : [];
      if (segment !== "") words.push(pick.selectedOptions[0].textContent);
      state.textContent = words.join("; ") || "everything";
    };
    box.hidden = false;
    box.addEventListener("change", apply);
    box.querySelector("button").addEventListener("click", () => {
      boxes.forEach((b) => (b.checked = true));
      if (pick) pick.value = "";
      apply();
    });
    document.addEventListener("click", (e) => box.contains(e.target) || (box.open = false));
    box.addEventListener("keydown", (e) => {
      if (e.key === "Escape") {
        box.open = false;
        box.querySelector("summary").focus();
      }
    });
  }

  // The values at a place of a picture: by pointer, or by arrow keys when it has the focus.
  const tip = make("div", "tip");
  tip.setAttribute("role", "status");
  document.body.append(tip);
  const shape = (svg, name, attributes) => {
    const e = document.createElementNS(svg.namespaceURI, name);
    Object.entries(attributes).forEach(([k, v]) => e.setAttribute(k, v));
    return e;
  };
  const number = (v, unit) => {
    if (unit === "%") return (100 * v).toFixed(Math.abs(v) < 0.0005 && v !== 0 ? 4 : 2) + "%";
    if (Math.abs(v) >= 1000) return v.toLocaleString("en-US", { maximumFractionDigits: 0 });
    return String(Number(v.toPrecision(4)));
  };
  let now = null, settle = null;
  const leave = () => {
    if (now) now.remove();
    now = settle = null;
    tip.textContent = "";
  };
  all("svg[data-plot]").forEach((svg) => {
    let plot = null, at = -1;
    const read = () => (plot ??= JSON.parse(svg.dataset.plot));
    const show = (k) => {
      const p = read();
      at = Math.max(0, Math.min(p.x.length - 1, k));
      leave();
      now = shape(svg, "g", { class: "cursor", "aria-hidden": "true" });
      now.append(shape(svg, "path", { d: `M${p.x[at]} ${p.h[0]}V${p.h[1]}` }));
      tip.append(make("b", "", p.l[at]));
      for (const [place, name, values] of p.t) {
        if (values[at] === null || hidden.has(String(place))) continue;
        now.append(shape(svg, "circle", { cx: p.x[at], cy: p.y[0] + p.y[1] * values[at], r: 3.5 }));
        const row = make("span", "", name + " ");
        row.append(make("i", "", number(values[at], p.u)));
        tip.append(row);
      }
      svg.append(now);
      const x = p.x[at], top = p.h[0];
      settle = () => {
        const m = svg.getScreenCTM(), room = document.documentElement.clientWidth - tip.offsetWidth - 4;
        tip.style.left = Math.max(4, Math.min(m.a * x + m.e + 12, room)) + "px";
        tip.style.top = Math.max(4, m.d * top + m.f - tip.offsetHeight - 4) + "px";
      };
      settle();
    };
    const near = (e) => {
      const p = read(), m = svg.getScreenCTM(), x = (e.clientX - m.e) / m.a;
      if (!p.x.length) return;
      let best = 0;
      p.x.forEach((v, k) => Math.abs(v - x) < Math.abs(p.x[best] - x) && (best = k));
      show(best);
    };
    svg.tabIndex = 0;
    svg.addEventListener("pointermove", near);
    svg.addEventListener("pointerdown", near);
    svg.addEventListener("pointerleave", leave);
    svg.addEventListener("blur", leave);
    svg.addEventListener("keydown", (e) => {
      const n = read().x.length;
      const to = { ArrowRight: at + 1, ArrowLeft: at < 0 ? n - 1 : at - 1, Home: 0, End: n - 1 }[e.key];
      if (e.key === "Escape") leave();
      if (to === undefined || !n) return;
      e.preventDefault();
      show(to);
    });
  });
  addEventListener("scroll", () => settle && settle(), { passive: true });

  // Paper shows what stands behind the headings that open; afterwards they are as they were.
  let opened = [];
  addEventListener("beforeprint", () => {
    opened = all("main details:not([open])");
    opened.forEach((d) => (d.open = true));
  });
  addEventListener("afterprint", () => opened.forEach((d) => (d.open = false)));
})();
