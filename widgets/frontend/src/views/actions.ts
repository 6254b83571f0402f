import { make, setText } from "../dom";
import type { Context, View } from "./view";

const SAID_MS = 2000;

/** What can be taken away from the Desk: the code that gives the same numbers. */
export function actions(context: Context): View {
  const { cleanUp } = context;
  const button = make("button", { type: "button", "data-fa": "copy" }, "Copy code");
  const code = make("code", { "data-fa": "code" });
  const root = make("footer", { class: "act" }, button, code);
  let timer = 0;
  cleanUp.add(() => clearTimeout(timer));

  cleanUp.on(button, "click", async () => {
    let done = true;
    try {
      await navigator.clipboard.writeText(code.textContent ?? "");
    } catch {
      // No clipboard on plain http and in some hosts: select the text, the usual keys copy it.
      getSelection()?.selectAllChildren(code);
      done = false;
    }
    setText(button, done ? "Copied" : "Selected: copy with Ctrl+C");
    clearTimeout(timer);
    timer = window.setTimeout(() => setText(button, "Copy code"), SAID_MS);
  });

  return { root, paint: ({ scene }) => setText(code, scene.code) };
}
