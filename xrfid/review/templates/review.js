"use strict";
(() => {
  const LARGEST = 64 * 2 ** 20;
  const said = document.getElementById("upload");
  const drop = document.getElementById("drop");

  // Widgets live in shadow roots; find the first focusable thing inside the host of a class.
  function inside(root, selector) {
    const direct = root.querySelector(selector);
    if (direct) return direct;
    for (const node of root.querySelectorAll("*")) {
      const found = node.shadowRoot && inside(node.shadowRoot, selector);
      if (found) return found;
    }
    return null;
  }
  function control(name) {
    const host = inside(document, `.key-${name}`);
    return host && inside(host.shadowRoot || host, "button, select, textarea, input");
  }
  const press = (name) => { const found = control(name); if (found && !found.disabled) found.click(); };

  function step(by) {
    const list = control("findings");
    if (!list || !list.options.length) return;
    const at = Math.min(Math.max(list.selectedIndex + by, 0), list.options.length - 1);
    if (at === list.selectedIndex) return;
    list.selectedIndex = at;
    list.dispatchEvent(new Event("change", { bubbles: true, composed: true }));
  }

  const keys = {
    j: () => step(1), k: () => step(-1), w: () => press("whatif"), z: () => press("lines"),
    a: () => press("accept"), q: () => press("question"), s: () => press("save"),
    "+": () => press("closer"), "-": () => press("farther"), 0: () => press("whole"),
    r: () => { const found = control("remark"); if (found) found.focus(); },
    "?": () => { const list = document.getElementById("keys"); list.open = !list.open; list.scrollIntoView(); },
  };
  document.addEventListener("keydown", (event) => {
    if (event.ctrlKey || event.altKey || event.metaKey || !(event.key in keys)) return;
    const at = event.composedPath()[0];
    if (at instanceof HTMLElement && (at.matches("input, textarea, select") || at.isContentEditable)) return;
    event.preventDefault();
    keys[event.key]();
  });

  // On a touch screen a drag scrolls the page; zooming is done with the buttons.
  if (matchMedia("(pointer: coarse)").matches) {
    setInterval(() => {
      for (const page of Bokeh.documents) for (const name of ["log", "linear"]) {
        const plot = page.get_model_by_name(name);
        if (plot && plot.toolbar.active_drag) plot.toolbar.active_drag = null;
      }
    }, 500);
  }

  async function send(file) {
    if (file.size > LARGEST) return `${file.name}: larger than 64 MB; give it on the command line`;
    const answer = await fetch("upload", {
      method: "POST", body: file, headers: { "X-File-Name": encodeURIComponent(file.name.slice(0, 150)) },
    });
    const told = await answer.json();
    return answer.ok ? `opened ${told.opened.join(", ")}` : told.error;
  }
  async function open(files) {
    for (const file of files) {
      said.textContent = `opening ${file.name} …`;
      try {
        said.textContent = await send(file);
      } catch (error) {
        said.textContent = `${file.name}: could not be sent (${error.message}); is xrfid review still running?`;
      }
    }
  }
  document.getElementById("file").addEventListener("change", (event) => open([...event.target.files]));
  addEventListener("dragover", (event) => {
    if (!event.dataTransfer.types.includes("Files")) return;
    event.preventDefault();
    drop.hidden = false;
  });
  addEventListener("dragleave", (event) => { if (!event.relatedTarget) drop.hidden = true; });
  addEventListener("drop", (event) => {
    drop.hidden = true;
    if (!event.dataTransfer.files.length) return;
    event.preventDefault();
    open([...event.dataTransfer.files]);
  });
})();
