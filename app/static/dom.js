// Small hands for the document: elements made once, then changed only where something changed.
// A person's own text goes through textContent alone, so markup in a name stays a name.

const SVG = 'http://www.w3.org/2000/svg'

function fill(node, attributes, children) {
  for (const [name, value] of Object.entries(attributes)) {
    if (name === 'text') node.textContent = value
    else if (name.startsWith('on')) node.addEventListener(name.slice(2), value)
    else if (value !== null && value !== undefined && value !== false) node.setAttribute(name, value === true ? '' : value)
  }
  node.append(...children.flat().filter(c => c !== null && c !== undefined))
  return node
}

export const el = (tag, attributes = {}, ...children) => fill(document.createElement(tag), attributes, children)
export const svg = (tag, attributes = {}, ...children) => fill(document.createElementNS(SVG, tag), attributes, children)

export function setText(node, text) {
  if (node.textContent !== text) node.textContent = text
}

export function setAttr(node, name, value) {
  if (value === null || value === undefined || value === false) {
    if (node.hasAttribute(name)) node.removeAttribute(name)
  } else {
    const text = value === true ? '' : String(value)
    if (node.getAttribute(name) !== text) node.setAttribute(name, text)
  }
}

export function setClass(node, name, on) {
  if (node.classList.contains(name) !== !!on) node.classList.toggle(name, !!on)
}

// Keep one child a key: make what is new, drop what is gone, put them in order, touch nothing else.
export function keyed(parent, keys, make, store = (parent.__keyed ??= new Map())) {
  const wanted = new Set(keys)
  for (const [key, item] of store) {
    if (!wanted.has(key)) { item.node.remove(); item.drop?.(); store.delete(key) }
  }
  let before = null
  for (const key of keys) {
    let item = store.get(key)
    if (!item) { item = make(key); store.set(key, item) }
    const place = before ? before.nextSibling : parent.firstChild
    if (item.node !== place) parent.insertBefore(item.node, place)
    before = item.node
  }
  return store
}

// Drawings that follow the hand: a pool of nodes by kind, so a frame changes attributes and makes nothing new.
export class Pool {
  constructor(root) { this.root = root; this.nodes = []; this.at = 0 }
  start() { this.at = 0 }
  put(tag, attributes, text) {
    let node = this.nodes[this.at]
    if (!node || node.tagName !== tag) {
      const fresh = svg(tag)
      if (node) { node.replaceWith(fresh) } else this.root.append(fresh)
      node = this.nodes[this.at] = fresh
      node.__set = {}
    }
    this.at += 1
    const set = node.__set
    for (const name in attributes) {
      const value = String(attributes[name])
      if (set[name] !== value) { node.setAttribute(name, value); set[name] = value }
    }
    for (const name in set) if (!(name in attributes)) { node.removeAttribute(name); delete set[name] }
    if (text !== undefined && node.textContent !== text) node.textContent = text
    else if (text === undefined && node.firstChild) node.textContent = ''
    return node
  }
  path(d, more = {}) { return this.put('path', {d, ...more}) }
  line(d) { return this.put('path', {d, class: 'wire'}) }
  text(x, y, text, more = {}) { return this.put('text', {x, y, ...more}, text) }
  dot(x, y) { return this.put('circle', {cx: x, cy: y, r: 3.2, class: 'dot'}) }
  end() { while (this.nodes.length > this.at) this.nodes.pop().remove() }
}

// Lengths and sizes are asked for once: asking again in the middle of a frame makes the browser lay out the page again.
let pixels = new Map(), sizes = new WeakMap()
export function px(name, node = document.documentElement) {
  const key = node === document.documentElement ? name : name + ' of ' + node.id
  if (!pixels.has(key)) pixels.set(key, parseFloat(getComputedStyle(node).getPropertyValue(name)))
  return pixels.get(key)
}
export function size(node) {
  let found = sizes.get(node)
  if (!found) {
    found = {width: node.clientWidth, height: node.clientHeight, top: node.getBoundingClientRect().top + scrollY}
    sizes.set(node, found)
  }
  return found
}
export function forgetSizes() { pixels = new Map(); sizes = new WeakMap() }
