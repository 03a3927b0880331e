/* Files by drag or picker: shows what was chosen, refuses too much before sending, and shows the upload moving.
 * The answer is the page itself, put in place of the one that stands. Without this script the form still works. */
(() => {
  "use strict";

  const size = (bytes) => (bytes < 1024 * 1024 ? `${Math.max(1, Math.round(bytes / 1024))} kB` : `${(bytes / 1024 / 1024).toFixed(1)} MB`);

  function start(form) {
    const drop = form.querySelector("[data-drop]");
    const input = drop.querySelector('input[type="file"]');
    const list = form.querySelector("[data-file-list]");
    const bar = form.querySelector("[data-upload-progress]");
    const said = form.querySelector("[data-upload-said]");
    const button = form.querySelector('button[type="submit"]');
    const maxFiles = Number(form.dataset.maxFiles);
    const maxBytes = Number(form.dataset.maxMb) * 1024 * 1024;

    function judge() {
      const files = [...input.files];
      const total = files.reduce((sum, file) => sum + file.size, 0);
      if (files.length > maxFiles) return `${files.length} files are more than the ${maxFiles} that go together. Send them in parts.`;
      if (total > maxBytes) return `${size(total)} are more than the ${form.dataset.maxMb} MB that go together. Send them in parts.`;
      const empty = files.find((file) => file.size === 0);
      return empty ? `${empty.name} is empty.` : "";
    }

    function show() {
      list.replaceChildren(...[...input.files].map((file) => {
        const item = document.createElement("li");
        const name = document.createElement("span");
        const bytes = document.createElement("span");
        name.textContent = file.name;
        bytes.textContent = size(file.size);
        bytes.className = "muted nowrap";
        item.append(name, bytes);
        item.classList.toggle("file-wrong", file.size === 0);
        return item;
      }));
      const problem = judge();
      input.setCustomValidity(problem);
      said.textContent = problem;
    }

    input.addEventListener("change", show);
    ["dragenter", "dragover"].forEach((type) => drop.addEventListener(type, (event) => { event.preventDefault(); drop.classList.add("drop-over"); }));
    ["dragleave", "drop"].forEach((type) => drop.addEventListener(type, () => drop.classList.remove("drop-over")));
    drop.addEventListener("drop", (event) => {
      event.preventDefault();
      if (!event.dataTransfer.files.length) return;
      input.files = event.dataTransfer.files;
      show();
    });

    form.addEventListener("submit", (event) => {
      event.preventDefault();
      const request = new XMLHttpRequest();
      const finish = (text) => { bar.hidden = true; button.disabled = false; said.textContent = text; };
      button.disabled = true;
      bar.hidden = false;
      said.textContent = "Uploading.";
      request.upload.addEventListener("progress", (moved) => {
        if (moved.lengthComputable) bar.value = (100 * moved.loaded) / moved.total;
      });
      request.upload.addEventListener("load", () => { said.textContent = "Arrived; the server reads the files."; bar.removeAttribute("value"); });
      request.addEventListener("error", () => finish("The connection was lost; nothing was kept. Try again."));
      request.addEventListener("load", () => {
        const problem = takeIn(request);
        if (problem) finish(problem);
      });
      request.open("POST", form.action);
      request.setRequestHeader("Accept", "text/html");
      request.send(new FormData(form));
    });
  }

  /* Puts the answered page in place; gives back a sentence when the answer is a refusal or no page. */
  function takeIn(request) {
    const page = new DOMParser().parseFromString(request.responseText, "text/html");
    const main = page.querySelector("main");
    const refusal = main && main.querySelector(".refusal");
    if (refusal) return [...refusal.querySelectorAll("h1, h1 + p:not(.muted)")].map((part) => part.textContent.trim()).join(" ");
    if (!main) return `The server answered ${request.status}; nothing was kept.`;
    document.querySelector("main").replaceWith(document.adoptNode(main));
    document.title = page.title;
    if (window.htmx) window.htmx.process(main);
    main.querySelectorAll("form[data-upload]").forEach(start);
    main.focus();
    return "";
  }

  document.addEventListener("DOMContentLoaded", () => document.querySelectorAll("form[data-upload]").forEach(start));
})();
