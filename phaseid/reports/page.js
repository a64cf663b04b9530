"use strict";
(function () {
  const root = document.documentElement;
  root.classList.add("js");
  const answers = Array.from(document.querySelectorAll("section.answer"));
  const radios = Array.from(document.querySelectorAll("input.choose"));

  function show(rank) {
    for (const section of answers) section.hidden = section.dataset.rank !== rank;
  }
  for (const radio of radios) radio.addEventListener("change", () => show(radio.value));
  const chosen = radios.find((radio) => radio.checked) || radios[0];
  if (chosen) {
    chosen.checked = true;
    show(chosen.value);
  }

  for (const section of answers) {
    let pinned = null;
    const readout = document.createElement("p");
    readout.className = "readout";
    readout.setAttribute("aria-live", "polite");
    section.append(readout);
    function light(key) {
      section.classList.toggle("lighting", key !== null);
      for (const mark of section.querySelectorAll("[data-key]"))
        mark.classList.toggle("lit", mark.dataset.key === key);
      const titles = Array.from(section.querySelectorAll(".mark.lit > title"));
      titles.sort((one, other) => other.textContent.length - one.textContent.length);
      readout.textContent = titles.length ? titles[0].textContent : "";
    }
    function keyOf(event) {
      const mark = event.target.closest("[data-key]");
      return mark ? mark.dataset.key : null;
    }
    section.addEventListener("pointerover", (event) => light(keyOf(event) || pinned));
    section.addEventListener("pointerleave", () => light(pinned));
    section.addEventListener("focusin", (event) => light(keyOf(event) || pinned));
    section.addEventListener("focusout", () => light(pinned));
    section.addEventListener("click", (event) => {
      const key = keyOf(event);
      pinned = key === pinned ? null : key;
      light(pinned);
    });
    section.addEventListener("keydown", (event) => {
      const row = event.target.closest("tr[data-key]");
      if (event.key === "Escape") {
        pinned = null;
        light(null);
      } else if (row && (event.key === "Enter" || event.key === " ")) {
        pinned = row.dataset.key === pinned ? null : row.dataset.key;
        light(pinned);
        event.preventDefault();
      } else if (row && (event.key === "ArrowDown" || event.key === "ArrowUp")) {
        const rows = Array.from(section.querySelectorAll("tr[data-key]"));
        const next = rows[rows.indexOf(row) + (event.key === "ArrowDown" ? 1 : -1)];
        if (next) next.focus();
        event.preventDefault();
      }
    });
  }
})();
