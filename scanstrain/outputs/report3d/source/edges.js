// SPDX-License-Identifier: MIT
// Draws the points and darkens what lies just behind an edge, so that the eye can tell near from far. The idea is
// that of eye-dome lighting (Boucheny 2009, from memory). Smooth surfaces keep their colours exactly.

import {
    BufferAttribute, BufferGeometry, DepthTexture, Mesh, NearestFilter, NoBlending, OrthographicCamera, ShaderMaterial,
    UnsignedIntType, WebGLRenderTarget,
} from "three";

const VERTEX = "void main() { gl_Position = vec4(position, 1.0); }";
// The inverse of depth is linear on the screen for any plane. So a place that lies behind the middle of two opposite
// neighbours lies behind an edge or in a corner; a slanted plane is left alone.
const FRAGMENT = `
uniform sampler2D colours, depths;
uniform vec2 range; // near and far [m]
uniform float slack; // what counts as flat [m], because points are drawn as discs that face the viewer
uniform int reach; // neighbours are this many pixels away
float nearness(ivec2 at) {
    float depth = texelFetch(depths, clamp(at, ivec2(0), textureSize(depths, 0) - 1), 0).r;
    return mix(1.0 / range.x, 1.0 / range.y, depth);
}
void main() {
    ivec2 at = ivec2(gl_FragCoord.xy);
    vec4 colour = texelFetch(colours, at, 0);
    if (colour.a == 0.0) discard;
    float here = nearness(at);
    ivec2 to[4] = ivec2[](ivec2(1, 0), ivec2(0, 1), ivec2(1, 1), ivec2(1, -1));
    float behind = 0.0;
    for (int pair = 0; pair < 4; pair++) {
        float middle = 0.5 * (nearness(at + reach * to[pair]) + nearness(at - reach * to[pair]));
        behind += max(0.0, middle / here - 1.0 - slack * here);
    }
    gl_FragColor = vec4(colour.rgb * max(0.4, exp(-12.0 * behind)), 1.0);
}`;

export class Edges {
    constructor(renderer) {
        this.renderer = renderer;
        this.target = new WebGLRenderTarget(1, 1, {
            minFilter: NearestFilter,
            magFilter: NearestFilter,
            depthTexture: new DepthTexture(1, 1, UnsignedIntType),
        });
        this.material = new ShaderMaterial({
            vertexShader: VERTEX,
            fragmentShader: FRAGMENT,
            blending: NoBlending,
            depthTest: false,
            depthWrite: false,
            uniforms: {
                colours: { value: this.target.texture },
                depths: { value: this.target.depthTexture },
                range: { value: [1, 2] },
                slack: { value: 0 },
                reach: { value: 1 },
            },
        });
        const geometry = new BufferGeometry();
        geometry.setAttribute("position", new BufferAttribute(new Float32Array([-1, -1, 0, 3, -1, 0, -1, 3, 0]), 3));
        this.screen = new Mesh(geometry, this.material);
        this.screen.frustumCulled = false;
        this.flat = new OrthographicCamera();
    }

    resize(width, height, ratio) {
        this.target.setSize(Math.floor(width * ratio), Math.floor(height * ratio));
        this.material.uniforms.reach.value = Math.max(1, Math.round(ratio));
    }

    draw(world, camera, slack) {
        const { range, slack: flatness } = this.material.uniforms;
        range.value = [camera.near, camera.far];
        flatness.value = slack;
        this.renderer.setRenderTarget(this.target);
        this.renderer.render(world, camera);
        this.renderer.setRenderTarget(null);
        this.renderer.render(this.screen, this.flat);
    }
}
