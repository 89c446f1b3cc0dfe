export function mount(node, sheet) { return {update(shown, state) { node.textContent = JSON.stringify(shown) }} }
