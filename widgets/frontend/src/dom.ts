import type { Action, Line, RunText } from "./schema/scene";

/** Collects what must be undone when a view goes away. */
export class CleanUp {
  private tasks: (() => void)[] = [];

  add(task: () => void): void {
    this.tasks.push(task);
  }

  on<E extends Event>(
    target: EventTarget, type: string, handler: (event: E) => void, options?: AddEventListenerOptions,
  ): void {
    target.addEventListener(type, handler as EventListener, options);
    this.tasks.push(() => target.removeEventListener(type, handler as EventListener, options));
  }

  run(): void {
    for (const task of this.tasks.splice(0).reverse()) task();
  }
}

type Attributes = Record<string, string | number | boolean | null | undefined>;

export function make<K extends keyof HTMLElementTagNameMap>(
  tag: K, attributes: Attributes = {}, ...children: (Node | string)[]
): HTMLElementTagNameMap[K] {
  const node = document.createElement(tag);
  for (const name in attributes) setAttribute(node, name, attributes[name]);
  node.append(...children);
  return node;
}

export function makeSvg<K extends keyof SVGElementTagNameMap>(
  tag: K, attributes: Attributes = {},
): SVGElementTagNameMap[K] {
  const node = document.createElementNS("http://www.w3.org/2000/svg", tag);
  for (const name in attributes) setAttribute(node, name, attributes[name]);
  return node;
}

/** Sets, changes or removes (null, undefined, false) an attribute, touching the page only when it differs. */
export function setAttribute(node: Element, name: string, value: Attributes[string]): void {
  if (value === null || value === undefined || value === false) {
    if (node.hasAttribute(name)) node.removeAttribute(name);
    return;
  }
  const text = value === true ? "" : String(value);
  if (node.getAttribute(name) !== text) node.setAttribute(name, text);
}

/** Text is always set this way, never as markup: names in files are not to be trusted. */
export function setText(node: Node, text: string): void {
  const only = node.firstChild;
  if (only && only === node.lastChild && only.nodeType === Node.TEXT_NODE) {
    if ((only as Text).data !== text) (only as Text).data = text;
  } else if (only || text !== "") {
    node.textContent = text;
  }
}

/** Keeps exactly `count` children, made by `create` when they are missing. */
export function keepChildren<T extends Element>(
  parent: Element, list: T[], count: number, create: (index: number) => T,
): void {
  while (list.length < count) {
    const node = create(list.length);
    list.push(node);
    parent.append(node);
  }
  while (list.length > count) list.pop()?.remove();
}

export type Act = (action: Action) => void;

function tagOf(run: RunText): "button" | "b" | "sub" | "em" | "span" {
  if (run.act) return "button";
  if (run.b) return "b";
  if (run.sub) return "sub";
  return run.em ? "em" : "span";
}

const actions = new WeakMap<Element, Action>();

/** Paints runs of text in place: a node is made anew only when its kind changes, so that focus stays. */
export function paintLine(parent: Element, line: Line, act?: Act): void {
  const old = Array.from(parent.children);
  line.forEach((item, index) => {
    const run: RunText = typeof item === "string" ? { t: item } : item;
    const tag = tagOf(run);
    let node = old[index];
    if (!node || node.localName !== tag) {
      const fresh = make(tag);
      if (tag === "button") {
        fresh.setAttribute("type", "button");
        fresh.addEventListener("click", () => {
          const action = actions.get(fresh);
          if (action && act) act(action);
        });
      }
      if (node) node.replaceWith(fresh);
      else parent.append(fresh);
      node = fresh;
    }
    if (run.act) actions.set(node, run.act);
    const names = [run.k ? "k" : "", run.dev ? "dvt" : "", run.act ? "lk" : ""].filter(Boolean).join(" ");
    setAttribute(node, "class", names || null);
    setText(node, run.t);
  });
  for (let index = line.length; index < old.length; index++) old[index]?.remove();
}

export function lineText(line: Line): string {
  return line.map((item) => (typeof item === "string" ? item : item.t)).join("");
}
